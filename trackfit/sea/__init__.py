"""Paths that know the sea: no position on land, no step across it."""
