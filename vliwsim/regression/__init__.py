"""Keeping kernels as they should be: many at once, against references, goldens and budgets."""
