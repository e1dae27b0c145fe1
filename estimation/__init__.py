"""Statistics on arrays: what changed at a line, how surely, and how we would know if it did not."""
