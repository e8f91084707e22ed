"""Readings to database and back: the only room with SQL in it."""
