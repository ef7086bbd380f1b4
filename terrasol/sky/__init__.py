"""The sun and the air over one place; knows no raster."""
