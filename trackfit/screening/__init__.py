"""Reasons to set a fix aside before anything is fitted."""
