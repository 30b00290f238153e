"""Estimator families; each file registers its own. See `contract` for the recipe."""
