"""Widgets of the bench screens; the arithmetic of each lies beside it, without a terminal."""
