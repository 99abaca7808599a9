"""Meters and supplies over VISA: the link, the profiles, the bench file.  It knows no amplifier."""
