"""The amplifier stage: its design file, what it should read, and what can be wrong with it."""
