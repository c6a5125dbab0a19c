"""Pure formulas on moments, NumPy only: each is stated here once."""
