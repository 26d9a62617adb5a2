"""Bases: ways to choose the resolved subspace."""
