"""What fills the middle of the walk's screen: one page for each kind of moment."""
