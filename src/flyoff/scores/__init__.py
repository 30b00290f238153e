"""Scores: what is kept of every run, step by step; see `contract` for the recipe."""
