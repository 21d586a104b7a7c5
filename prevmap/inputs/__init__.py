"""What was measured and where: tables, boundaries, rasters and the grid to predict on."""
