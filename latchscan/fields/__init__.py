"""Numerics on arrays: conducting sheets and layered half spaces; knows no layout."""
