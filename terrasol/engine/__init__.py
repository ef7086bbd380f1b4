"""All raster work as a plan of blocks, run by threads."""
