"""The calculation through redshift, and its result."""
