"""Decisions as files."""
