"""Measuring: farthest points, nearest neighbours, walls."""
