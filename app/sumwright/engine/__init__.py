"""Numbers in, numbers out: the weighted-sum stage on NumPy alone."""
