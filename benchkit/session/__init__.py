"""Runs a walk: carries out its actions and feeds back what came of them as events.

The same code serves a screen, the plain lines of a terminal and a stand-in; it knows none of them, only `front`.
"""
