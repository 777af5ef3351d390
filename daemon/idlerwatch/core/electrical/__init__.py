"""Electrical computation, one module a subject; vectorised, legs on the last axis, SI units and plain ratios."""
