"""Particle files in, chunks of particles in plain units out."""
