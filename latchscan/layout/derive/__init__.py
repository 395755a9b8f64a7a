"""Booleans: the technology's expressions in windows, stitched to whole regions."""
