"""Every site's estimate from one question, where the study's choices allow it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from estimation.arrays import Cube, Matrix, Vector
from estimation.choices import Choices
from estimation.inference import Interval, interval
from estimation.line_fit import Bandwidths
from estimation.site_bandwidths import SiteWidths, choose_site_widths, score_spreads
from estimation.site_ladder import SiteFits, SiteLadder

if TYPE_CHECKING:
    from study.analysis import Workbench
    from study.comparison import SiteReading


def can_be_read_at_once(choices: Choices, *, clustered: bool) -> bool:
    """Whether all sites' fits come from one site ladder: its variance, no clusters, no covariates taken off."""
    return choices.variance == "neighbour" and not clustered and not choices.adjust


@dataclass(frozen=True, slots=True, kw_only=True)
class SitesAtOnce:
    """A site ladder with what its sites' own bandwidths need."""

    ladder: SiteLadder
    rows: np.ndarray[tuple[int, ...], np.dtype[np.int64]]
    spread: Vector

    @classmethod
    def of(cls, ladder: SiteLadder) -> SitesAtOnce:
        """Look at the scores of every site once."""
        rows, spread = score_spreads(ladder)
        return cls(ladder=ladder, rows=rows, spread=spread)

    def chosen(self, choices: Choices) -> SiteWidths | None:
        """Each site's own widths; None for a rule that needs each line."""
        return choose_site_widths(self.ladder, self.rows, self.spread, choices)


def readings_at_once(
    bench: Workbench, outcome: str, width: float | None
) -> list[tuple[Bandwidths, SiteReading] | None] | None:
    """(widths, reading) of each site, None for a site without an answer; None where sites must be asked one by one."""
    choices = bench.study.estimate
    sites = bench.sites_at_once(outcome)
    if sites is None or (width is not None and choices.pilot == "mse"):
        return None
    if width is None:
        widths, rule = (
            sites.chosen(choices),
            choices.bandwidth if isinstance(choices.bandwidth, str) else "chosen",
        )
    else:
        one = np.full(len(bench.sites), float(width))
        widths, rule = SiteWidths(below=one, above=one), "chosen"
    if widths is None:
        return None
    caps = np.array([bench.cap(name) for name in bench.sites])
    below, above = np.minimum(widths.below, caps[:, 0]), np.minimum(widths.above, caps[:, 1])
    known = np.isfinite(below) & np.isfinite(above)
    asked = [np.where(known, own, 1.0) for own in (below, above)]
    pilots = asked
    if not isinstance(choices.pilot, str):
        pilots = [np.minimum(float(choices.pilot), caps[:, j]) for j in (0, 1)]
    with np.errstate(invalid="ignore", divide="ignore"):
        fits = sites.ladder.fits(*asked, *pilots)
    found: list[tuple[Bandwidths, SiteReading] | None] = []
    for s, reading in enumerate(_readings(fits, sites.ladder.targets > 1, choices.level)):
        if reading is None or not known[s]:
            found.append(None)
            continue
        own = Bandwidths(
            below=float(below[s]),
            above=float(above[s]),
            pilot_below=float(pilots[0][s]),
            pilot_above=float(pilots[1][s]),
            rule=rule,
        )
        found.append((own, reading))
    return found


def _readings(fits: SiteFits, fuzzy: bool, level: float) -> list[SiteReading | None]:
    from study.comparison import SiteReading  # the two rooms look at each other; here at the last moment

    plain, plain_error = _headline(fits.jump, fits.covariance, fuzzy)
    robust, robust_error = _headline(fits.robust_jump, fits.robust_covariance, fuzzy)
    jump_error = np.sqrt(np.maximum(fits.robust_covariance[:, 0, 0], 0.0))
    found: list[SiteReading | None] = []
    for s in range(len(robust)):
        if not np.isfinite(robust[s]) or not robust_error[s] > 0.0:
            found.append(None)
            continue
        take_up, strength, intention = None, None, None
        if fuzzy:
            take_up = float(fits.jump[s, 1])
            spread = float(fits.covariance[s, 1, 1])
            strength = take_up**2 / spread if spread > 0.0 else float("inf")
            intention = _interval(fits.robust_jump[s, 0], jump_error[s], level)
        found.append(
            SiteReading(
                estimate=float(plain[s]),
                std_error=float(plain_error[s]),
                robust=_interval(robust[s], robust_error[s], level),
                count_below=int(fits.count_below[s]),
                count_above=int(fits.count_above[s]),
                take_up_jump=take_up,
                first_stage_f=strength,
                intention=intention,
            )
        )
    return found


def _interval(estimate: float, error: float, level: float) -> Interval:
    return interval(float(estimate), float(error), level=level)


def _headline(jump: Matrix, covariance: Cube, fuzzy: bool) -> tuple[Vector, Vector]:
    """The jump in the outcome, or the ratio of two, with its error, shape (S,) each."""
    if not fuzzy:
        return jump[:, 0], np.sqrt(np.maximum(covariance[:, 0, 0], 0.0))
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = np.where(jump[:, 1] != 0.0, jump[:, 0] / jump[:, 1], np.nan)
        variance = covariance[:, 0, 0] + ratio**2 * covariance[:, 1, 1] - 2.0 * ratio * covariance[:, 0, 1]
        return ratio, np.sqrt(np.maximum(variance, 0.0)) / np.abs(jump[:, 1])
