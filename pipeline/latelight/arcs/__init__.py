"""Find faint extended arcs in a difference."""
