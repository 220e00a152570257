"""Synthetic frames with exact truth."""
