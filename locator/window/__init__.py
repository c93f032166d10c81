"""The 3-D scene of the results."""
