"""Ornstein-Uhlenbeck noise: the process, and its fits to time series."""
