"""What to replace first, and with what."""
