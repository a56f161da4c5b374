"""Everything that touches pixels: opening rasters, pixel areas, tallies, strata."""
