"""Chunks of particles in, finished float images out; knows nothing of files on either side."""
