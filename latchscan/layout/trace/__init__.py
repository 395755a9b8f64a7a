"""What `layout.nets` is made of: which shapes touch, tile by tile, and what hangs together."""
