"""benchkit: stands beside the bench while a class-AB output stage is powered up and trimmed."""

__version__ = "0.1.0"
