"""Who runs the blocks of a build."""
