"""Numerical linear algebra: arrays in, arrays out; no model, no file, no default."""
