"""Float images in, coded tiles on disk out; knows nothing of particles."""
