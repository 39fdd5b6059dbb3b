"""From rates to populations at one redshift."""
