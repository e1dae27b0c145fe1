"""The disclosure guard: rules as data files, and what they do to counts, estimates, tables, bins and sweeps."""
