"""The command line's rooms, one a command; each loads only when it is asked for."""
