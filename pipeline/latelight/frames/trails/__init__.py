"""Bright straight trails across a frame, found by sums along all lines."""
