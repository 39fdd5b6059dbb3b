"""What levelnet promises about its cost, each promise held in one run; see `__main__`."""
