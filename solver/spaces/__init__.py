"""Spaces: grids, coefficients and what lies between them."""
