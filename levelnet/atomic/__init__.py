"""One atom or ion: levels and rates, no cosmology."""
