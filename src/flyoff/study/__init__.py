"""Experiments: configuration, plan, execution, store, tables."""
