"""Uncertainty from the data themselves: bootstrap, jackknife, permutation, held-out folds."""
