"""The commands: one module each, with its arguments and what it prints."""
