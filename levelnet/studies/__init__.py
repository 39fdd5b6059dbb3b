"""Studies made of runs: how many levels matter, which rates the answer hangs on."""
