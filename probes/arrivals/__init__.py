"""Which files are complete snapshots, and in which order: patterns, listing, settling, grouping."""
