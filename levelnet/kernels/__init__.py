"""Compiled inner loops: arrays in, arrays out; the only place that imports numba."""
