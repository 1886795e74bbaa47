"""Distance distributions of a crystal."""
