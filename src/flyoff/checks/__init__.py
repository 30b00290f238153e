"""Checks of what estimators promise, for the built-in ones and for a user's own."""
