"""Classify: what kind of state a field is, what it repeats, its symmetries, whether two states are one."""
