"""The study: its file, its data, its run and the command line."""
