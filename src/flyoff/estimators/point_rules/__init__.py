"""Point rules, found by name; each is coefficients only. See `_skeleton`."""
