"""Star lists, alignment and resampling."""
