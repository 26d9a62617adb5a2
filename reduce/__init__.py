"""Reduced stochastic models, and the evidence for or against them."""
