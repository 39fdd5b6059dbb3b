"""Figures of results: the only room that imports matplotlib."""
