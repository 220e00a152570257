"""Which pixels of a frame are not to be used, and why: one module a fault."""
