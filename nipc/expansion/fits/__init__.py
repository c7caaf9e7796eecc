"""Ways to find the coefficients of an expansion from runs; each is one file."""
