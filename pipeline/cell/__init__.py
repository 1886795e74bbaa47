"""From parsed records to the canonical crystal."""
