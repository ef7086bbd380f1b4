"""Ground under sky."""
