"""Which records are the same crystal: candidates, witnesses, families, groups."""
