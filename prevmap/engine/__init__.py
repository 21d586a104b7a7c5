"""The mathematics: arrays in, arrays out; distances in kilometres, the field on the logit scale."""
