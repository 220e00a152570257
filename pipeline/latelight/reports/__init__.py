"""What is made from finished nights, or before one: tables, maps and pictures."""
