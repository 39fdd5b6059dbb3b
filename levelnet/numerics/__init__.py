"""Algorithms that know no physics."""
