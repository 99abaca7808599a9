"""The screens of a walk: keyboard only, complete at 80x24.

A screen decides nothing.  It shows the `View` that a session hands it, puts the session's questions, and returns what
the person answered (`benchkit.session.front`).  The one thing that it does by itself is to ask for "off", at once.
"""
