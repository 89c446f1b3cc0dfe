"""Param, no Panel: what a person chooses, and what follows from it."""
