"""The dashboard: pages over the store, served to a browser."""
