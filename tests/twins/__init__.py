"""Slow, obvious twins of every number: written from the papers' formulas, not from the product's code.

Conventions: ``x`` is the score minus the cutoff (signed), ``y`` the outcome, ``weight`` the sampling weight, ``above`` true on the side at or above the line.
Everything is dense, one formula at a time; nothing here is meant to be fast.
"""
