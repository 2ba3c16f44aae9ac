"""Leastbend: the least polynomial degree that calibration data can defend."""
