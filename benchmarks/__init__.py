"""What levelnet costs, and how right it is: error first, then ratios to a named rival."""
