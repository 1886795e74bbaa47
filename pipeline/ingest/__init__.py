"""From paths to rows of the store, in chunks that survive being killed."""
