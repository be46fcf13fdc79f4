"""An invented volume, made from a seed."""
