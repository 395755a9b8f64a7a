"""Behind `pins`, `ties` and `injectors`: names in conflict, footing on pieces, paths, openings."""
