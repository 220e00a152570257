"""A night's work: pairing, the chain of stages, engines."""
