"""Whole screens: the start, the walk, and the question before leaving."""
