"""What leaves the store: exports, surveys, answers."""
