"""Numba only: arrays and plain floats in, preallocated arrays out."""
