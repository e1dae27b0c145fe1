"""Sets of rows by what defines them: what a released count counts, and what a later release must not come too near to."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass, fields
from typing import Any, Final

import numpy as np

from estimation.arrays import Mask
from study.analysis import Workbench
from study.assemble import Assigned

CLOSED_KERNELS: Final = ("uniform",)  # give weight to a row at exactly the bandwidth


@dataclass(frozen=True, slots=True, kw_only=True)
class RowSet:
    """Rows of a study's data, by conditions that all hold.

    Attributes
    ----------
    used
        Whether only rows on one side of a line or the other are meant; else every row that was read.
    reason
        Rows left out for this reason.
    site, side
        Of this site; "below" or "above" the line.
    low, high
        |score − cutoff| at least `low` and under `high` (at most `high` where `closed`), in units of the score.
    known, missing
        An outcome that is known, or missing, in these rows.
    took
        Whether these rows took the programme.
    complete
        Whether every covariate is known.
    """

    used: bool = True
    reason: str | None = None
    site: str | None = None
    side: str | None = None
    low: float = 0.0
    high: float | None = None
    closed: bool = False
    known: str | None = None
    missing: str | None = None
    took: bool | None = None
    complete: bool = False

    def mask(self, bench: Workbench) -> Mask:
        """Which rows of the file, shape (n,); a site or a column that the study no longer has holds none."""
        a = bench.assigned
        if self.reason is not None:
            return self._because(a)
        rows: Mask = (a.reason == 0) if self.used else np.ones(a.rows_read, dtype=bool)
        if self.site is not None:
            rows = rows & (
                np.zeros(a.rows_read, dtype=bool)
                if a.site is None or self.site not in a.site_names
                else a.site == a.site_names.index(self.site)
            )
        if self.side is not None:
            rows = rows & (a.above == (self.side == "above"))
        if self.low > 0.0 or self.high is not None:
            rows = rows & self._near(np.abs(a.position))
        for name, known in ((self.known, True), (self.missing, False)):
            if name is not None:
                column = a.outcomes.get(name)
                rows = rows & (np.zeros_like(rows) if column is None else np.isnan(column) != known)
        if self.took is not None:
            rows = rows & (np.zeros_like(rows) if a.take_up is None else (a.take_up > 0.0) == self.took)
            if a.take_up is not None:
                rows = rows & ~np.isnan(a.take_up)
        if self.known is not None and a.take_up is not None:
            rows = rows & ~np.isnan(a.take_up)  # such a row enters no estimate
        if self.complete:
            for name in bench.study.columns.covariates:
                rows = rows & ~np.isnan(a.covariates[name])
        return rows

    def _because(self, a: Assigned) -> Mask:
        if self.reason not in a.reasons:
            return np.zeros(a.rows_read, dtype=bool)
        found: Mask = a.reason == a.reasons.index(self.reason)
        return found

    def _near(self, distance: np.ndarray) -> Mask:
        with np.errstate(invalid="ignore"):
            rows: Mask = distance >= self.low
            if self.high is not None:
                rows = rows & (distance <= self.high if self.closed else distance < self.high)
        return rows

    def to_document(self) -> dict[str, Any]:
        """As the list of releases keeps it: only what is not the default."""
        return {
            field.name: value
            for field in fields(self)
            if (value := getattr(self, field.name)) != field.default
        }


def row_set_from(document: Mapping[str, Any]) -> RowSet:
    """A set as `to_document` wrote it; keys of a later version are an error.

    Raises
    ------
    ValueError
        When a key is not known, so that the set can't be told.
    """
    known = asdict(RowSet())
    if not set(document) <= set(known):
        raise ValueError("a set of rows with unknown keys")
    return RowSet(**dict(document))
