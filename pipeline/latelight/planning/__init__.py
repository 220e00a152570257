"""What fields probe and where echoes lie, before any frame is taken: pure numbers."""
