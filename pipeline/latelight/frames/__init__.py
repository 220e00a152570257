"""Read FITS frames: pixels, variance, mask, header words."""
