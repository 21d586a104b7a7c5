"""The view an analyst has of the mathematics: a model, its fit, and what the fit predicts."""
