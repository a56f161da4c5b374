"""Estimates from a sample, and the rows that report them."""
