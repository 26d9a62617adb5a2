"""Oceans: each gives F, A and B of one flow."""
