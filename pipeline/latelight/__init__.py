"""Find light echoes in pairs of survey frames."""

__version__ = "0.2.0"
