"""Bring two frames to one PSF and one flux scale."""
