"""The difference of two matched frames and its noise."""
