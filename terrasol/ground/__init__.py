"""An elevation model as a piece of the Earth."""
