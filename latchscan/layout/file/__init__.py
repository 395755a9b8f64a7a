"""Reading: the guarded reader, its tables, the hierarchy and the walk through it."""
