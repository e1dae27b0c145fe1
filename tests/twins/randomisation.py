"""Local randomisation (methods 4) by listing every assignment."""

from __future__ import annotations

import itertools
from fractions import Fraction
from math import comb

import numpy as np


def every_difference(y, treated_count):
    """Differences in means over all assignments with the same number treated, exact in fractions."""
    values = [Fraction(v) for v in y]
    total, n, m = sum(values), len(values), treated_count
    for chosen in itertools.combinations(range(n), m):
        part = sum(values[i] for i in chosen)
        yield Fraction(part, 1) / m - (total - part) / (n - m)


def p_value(y, treated, effect=0):
    """Share of assignments whose |difference| is at least the observed one, of outcomes with the effect taken out."""
    adjusted = [Fraction(float(v)) - (Fraction(effect) if t else 0) for v, t in zip(y, treated)]
    m, n = int(sum(treated)), len(treated)
    observed = Fraction(sum(a for a, t in zip(adjusted, treated) if t), 1) / m - sum(
        a for a, t in zip(adjusted, treated) if not t
    ) / (n - m)
    differences = list(every_difference(adjusted, m))
    return Fraction(sum(abs(d) >= abs(observed) for d in differences), len(differences))


def hypergeometric_p_value(ones, n, treated, ones_treated):
    """The same for a binary outcome, from the hypergeometric distribution alone."""

    def difference(k):
        return abs(Fraction(k, treated) - Fraction(ones - k, n - treated))

    counts = range(max(0, ones - (n - treated)), min(ones, treated) + 1)
    far = [k for k in counts if difference(k) >= difference(ones_treated)]
    return Fraction(sum(comb(ones, k) * comb(n - ones, treated - k) for k in far), comb(n, treated))


def hodges_lehmann(y, treated):
    """Median of all differences of one treated and one other unit."""
    t = np.asarray(treated, dtype=bool)
    return float(np.median([a - b for a in y[t] for b in y[~t]]))


def inversion(y, treated, level, low, high, points=2001):
    """Ends of the set of effects that the two-sided test does not reject, on a scan of a range."""
    kept = [e for e in np.linspace(low, high, points) if p_value(y, treated, float(e)) > 1 - level]
    return min(kept), max(kept)
