"""Which counts may stand beside each other: none that adding and subtracting could turn into a small group.

Every released count is a set of rows. Rows that belong to the same released sets form one atom. A group of rows can be
worked out exactly from released counts if and only if its indicator over the atoms is a linear combination of the
sets' indicators. A set is therefore let through only while no union of atoms with fewer rows than the threshold becomes
such a combination. This covers suppressing a second cell beside a first one, nested bandwidths, donuts and windows.

The same is asked of the sets of rows that estimates of one outcome stand on, as if their sizes were shown: two
estimates that differ by a few rows give those rows away.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

import numpy as np

from estimation.arrays import Codes, Mask, Matrix

_MOST: Final = 50_000  # choices tried; beyond them a set is refused for want of certainty
_ROUNDING: Final = 1e-7
_NEAR: Final = 1e-5


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
    A group under the threshold is made of small atoms only. The combinations c of sets that leave out every large atom
    solve c A_large = 0; what they make of the small atoms, c A_small, is a space of some dimension d. In reduced form
    each of its 0/1 vectors is known by its d leading entries, so that all choices of leading atoms are tried that stay
    under the threshold themselves. With too many to try, the answer is yes.
    """
    incidence, sizes = _coarse(incidence, sizes)
    small = sizes < threshold
    if not small.any():
        return False
    space = _span(_left_null(incidence[:, ~small]) @ incidence[:, small])
    if not len(space):
        return False  # no combination of small atoms alone
    basis, leading = _reduced(space)
    chosen = _choices(sizes[small][leading], threshold)
    if chosen is None:
        return True
    for start in range(0, len(chosen), 4096):
        groups = chosen[start : start + 4096] @ basis
        whole = np.all((np.abs(groups) < _NEAR) | (np.abs(groups - 1.0) < _NEAR), axis=1)
        if np.any(np.round(groups[whole]) @ sizes[small] < threshold):
            return True
    return False


def _reduced(space: Matrix) -> tuple[Matrix, list[int]]:
    """(reduced row echelon form of independent rows, the column of each row's leading one)."""
    basis, leading = space.copy(), []
    for i in range(len(basis)):
        j = int(np.argmax(np.abs(basis[i])))
        leading.append(j)
        basis[i] /= basis[i, j]
        others = np.arange(len(basis)) != i
        basis[others] -= np.outer(basis[others, j], basis[i])
    return basis, leading


def _choices(sizes: Codes, threshold: int) -> Matrix | None:
    """Every choice of one or more atoms that stays under the threshold, as rows of 0 and 1; None with too many."""
    found: list[tuple[int, ...]] = []
    stack: list[tuple[tuple[int, ...], int]] = [((), 0)]
    while stack:
        taken, size = stack.pop()
        for i in range(taken[-1] + 1 if taken else 0, len(sizes)):
            if size + int(sizes[i]) < threshold:
                found.append((*taken, i))
                stack.append((found[-1], size + int(sizes[i])))
        if len(found) > _MOST:
            return None
    chosen = np.zeros((len(found), len(sizes)))
    for row, taken in enumerate(found):
        chosen[row, list(taken)] = 1.0
    return chosen


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


def _left_null(matrix: Matrix) -> Matrix:
    """Orthonormal rows c with c @ matrix = 0."""
    if not matrix.shape[1]:
        return np.eye(len(matrix))
    left, scale, _ = np.linalg.svd(matrix, full_matrices=True)
    found: Matrix = left[:, int(np.sum(scale > _ROUNDING * max(matrix.shape))) :].T
    return found


def _span(rows: Matrix) -> Matrix:
    """Orthonormal rows that span the same space."""
    if not rows.size:
        return rows[:0]
    _, scale, right = np.linalg.svd(rows, full_matrices=False)
    found: Matrix = right[: int(np.sum(scale > _ROUNDING * max(rows.shape)))]
    return found
