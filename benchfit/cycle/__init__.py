"""Samples → the constants of one cycle with their covariance."""
