"""A decision made of the light: parcels, snow, plots."""
