"""Find moving ridges by stacking all epochs along trial velocities."""
