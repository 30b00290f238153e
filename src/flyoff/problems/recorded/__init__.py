"""Recorded problems: data sets read from files, one file each."""
