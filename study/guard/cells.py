"""Which counts may stand beside each other: none that adding and subtracting could turn into a small group.

Every released count is a set of rows. Rows that belong to the same released sets form one atom. A group of rows can be
worked out exactly from released counts if and only if its indicator over the atoms is a linear combination of the
sets' indicators. A set is therefore let through only while no union of atoms with fewer rows than the threshold becomes
such a combination. This covers suppressing a second cell beside a first one, nested bandwidths, donuts and windows.

The same is asked of the sets of rows that estimates of one outcome stand on, as if their sizes were shown: two
estimates that differ by a few rows give those rows away.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Final

import numpy as np

from estimation.arrays import Codes, Mask, Matrix

_SEARCH: Final = 20_000  # unions looked at before a set is refused for want of certainty
_ROUNDING: Final = 1e-7


def admit(
    sets: Sequence[Mask], threshold: int, *, zeros: bool = False, released: Sequence[Mask] = ()
) -> list[bool]:
    """Which of the sets may be shown, asked in order: an earlier one takes precedence.

    Parameters
    ----------
    sets
        Each shape (n,): the rows that a count counts.
    threshold
        Fewest rows of a group that may be worked out.
    zeros
        Whether an empty set may be shown.
    released
        Sets that left before; what they already give away can't be taken back, and nothing is added to it then.

    Returns
    -------
    For each set whether it may be shown.
    """
    every = [*released, *sets]
    if not every:
        return []
    incidence, sizes = _atoms(every)
    taken = list(range(len(released)))
    spoilt = bool(taken) and exposes(incidence[taken], sizes, threshold)
    shown: list[bool] = []
    for i in range(len(released), len(every)):
        row = incidence[i]
        size = int(row @ sizes)
        known = any(np.array_equal(row, incidence[j]) for j in taken)
        if known:
            allowed = True
        elif size == 0:
            allowed = zeros
        elif size < threshold or spoilt:
            allowed = False
        else:
            allowed = not exposes(incidence[[*taken, i]], sizes, threshold)
        if allowed and size:
            taken.append(i)
        shown.append(allowed)
    return shown


def exposes(incidence: Matrix, sizes: Codes, threshold: int) -> bool:
    """Whether counts of these sets let a group of 1 to threshold − 1 rows be worked out.

    Parameters
    ----------
    incidence
        Shape (sets, atoms): 1 where the set holds the atom.
    sizes
        Rows of each atom, shape (atoms,).

    Notes
    -----
    With N a basis of the null space of the incidence matrix, a vector x over atoms is a combination of its rows if and
    only if x N = 0. A group under the threshold is made of small atoms only, so that the question is whether some of
    the small atoms' rows of N add up to nought. It is undecided where there are too many to try: then the answer is yes.
    """
    incidence, sizes = _coarse(incidence, sizes)
    small = np.flatnonzero(sizes < threshold)
    if not len(small):
        return False
    null = _null_space(incidence)
    rows = null[small]
    if not rows.shape[1]:
        return True  # every atom can be worked out
    scale = np.linalg.svd(rows, compute_uv=False)
    if int(np.sum(scale > _ROUNDING)) == len(small):
        return False  # no combination of small atoms alone
    for tried, total in enumerate(_sums(rows, sizes[small], threshold)):
        if tried >= _SEARCH or float(np.max(np.abs(total))) < _ROUNDING:
            return True
    return False


def _sums(rows: Matrix, sizes: Codes, threshold: int) -> Iterator[Matrix]:
    """Sums over every union of rows whose sizes stay under the threshold."""
    stack = [(-1, 0, np.zeros(rows.shape[1]))]
    while stack:
        last, size, total = stack.pop()
        for i in range(last + 1, len(rows)):
            grown = size + int(sizes[i])
            if grown < threshold:
                added = total + rows[i]
                yield added
                stack.append((i, grown, added))


def _atoms(sets: Sequence[Mask]) -> tuple[Matrix, Codes]:
    """(sets × atoms incidence, rows of each atom); rows that no set holds are left out."""
    packed = np.packbits(np.column_stack(sets), axis=1)
    keys = np.ascontiguousarray(packed).view(np.dtype((np.void, packed.shape[1]))).ravel()
    kinds, counts = np.unique(keys, return_counts=True)
    bits = np.unpackbits(kinds.view(np.uint8).reshape(len(kinds), -1), axis=1)[:, : len(sets)]
    held = bits.any(axis=1)
    return bits[held].T.astype(np.float64), counts[held].astype(np.int64)


def _coarse(incidence: Matrix, sizes: Codes) -> tuple[Matrix, Codes]:
    """Atoms that the sets at hand do not tell apart taken together; those in none of them left out."""
    columns, place = np.unique(incidence, axis=1, return_inverse=True)
    merged = np.bincount(place.ravel(), weights=sizes, minlength=columns.shape[1]).astype(np.int64)
    held = columns.any(axis=0)
    return columns[:, held], merged[held]


def _null_space(incidence: Matrix) -> Matrix:
    """Orthonormal basis of the null space, shape (atoms, dimension)."""
    _, scale, right = np.linalg.svd(incidence, full_matrices=True)
    rank = int(np.sum(scale > _ROUNDING * max(incidence.shape)))
    found: Matrix = right[rank:].T
    return found
