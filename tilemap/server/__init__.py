"""An atlas in, HTTP out; never writes an atlas."""
