"""The small volume that all tests of this room share."""

SCALE = 0.05
SEED = 11
