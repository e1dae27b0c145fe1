r"""The joint covariance of estimates whose rows share clusters.

Each estimate's spread is a sum over clusters, Var = Σ_g c_g² with c_g what the cluster does to it
(`estimation.cluster_ladder`), and two estimates covary by Σ_g c_g c′_g over the clusters they share. For a ratio of
jumps r = j_y/j_t the delta method gives c_g = (c_g^y − r c_g^t)/j_t.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from estimation.arrays import Codes, Matrix, Vector
from estimation.cluster_ladder import ClusterChanges
from estimation.line_fit import LineFit


@dataclass(frozen=True, slots=True, kw_only=True)
class ClusterShares:
    """What each cluster does to one estimate: clusters' codes and their shares, shape (G,) both."""

    names: Codes
    shares: Vector


def shares_of_jump(changes: ClusterChanges) -> ClusterShares:
    """Of the bias-corrected jump in the outcome."""
    return ClusterShares(names=changes.names, shares=changes.robust[:, 0])


def shares_of_ratio(changes: ClusterChanges, fit: LineFit) -> ClusterShares:
    """Of the ratio of bias-corrected jumps."""
    ratio = fit.robust_jump[0] / fit.robust_jump[1]
    shares = (changes.robust[:, 0] - ratio * changes.robust[:, 1]) / fit.robust_jump[1]
    return ClusterShares(names=changes.names, shares=np.asarray(shares))


def joint_covariance(parts: Sequence[ClusterShares]) -> tuple[Matrix, int]:
    """(covariance of k estimates, shape (k, k); clusters that any of them rests on)."""
    names, code = np.unique(np.concatenate([part.names for part in parts]), return_inverse=True)
    table = np.zeros((len(parts), len(names)))
    start = 0
    for i, part in enumerate(parts):
        table[i, code[start : start + len(part.names)]] = part.shares
        start += len(part.names)
    return np.asarray(table @ table.T), int(np.any(table != 0.0, axis=0).sum())
