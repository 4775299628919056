"""Exact arithmetic: rationals and balls; integer ratios in, exact numbers or correctly rounded doubles out."""
