"""Puts this folder on the path, so that tests in every room can import `atlas_maker`."""
