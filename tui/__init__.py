"""The bench: the full-screen program on top of `study`."""
