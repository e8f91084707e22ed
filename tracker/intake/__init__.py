"""Files to checked readings."""
