"""Plain twins of the fast code, written to be read."""
