"""Follow arcs over all epochs of a field."""
