"""Store and physics together: figures of the fleet."""
