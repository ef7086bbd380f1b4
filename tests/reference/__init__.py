"""Slow, plain, obvious re-implementations that live only in the tests.

They share no code with terrasol, so that an agreement between the two means something. All of
them take a north-up grid of metric cells (row 0 lies in the north, column 0 in the west) on
which grid north is true north.
"""
