"""An invented volume, made from a seed."""

from tilemap.demo.marram import SEED, build_file, make

__all__ = ["SEED", "build_file", "make"]
