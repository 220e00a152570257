"""Light-echo geometry: pure physics, no pixels."""
