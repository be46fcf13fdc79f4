"""What all tests share. Lying here, it puts this folder on the path, so that every room can import `atlas_maker`."""

import hypothesis

# A first call may compile for seconds (numba), and machines that run tests are busy: a slow example is no failure.
hypothesis.settings.register_profile("tilemap", deadline=None)
hypothesis.settings.load_profile("tilemap")
