"""Readings, the accuracy of meters, and the uncertainty that follows from it."""
