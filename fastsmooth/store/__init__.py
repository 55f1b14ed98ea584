"""A store: sums of what was counted, so that new files are added without reading the old ones."""
