"""One outcome at one line, prepared once: bandwidths, readings, sweeps, curves and bins are asked of it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np

from estimation.adjustment import adjusted
from estimation.arrays import Codes, Matrix, Vector
from estimation.bandwidth import ScoreSpread, choose_bandwidths, rule_of_thumb_curvature
from estimation.choices import Choices
from estimation.cluster_ladder import ClusterChanges, ClusterLadder
from estimation.errors import CannotEstimate
from estimation.inference import quantile
from estimation.ladder import Ladder, Widths
from estimation.line_fit import Bandwidths, LineFit
from estimation.local_polynomial import fit_rows
from estimation.moments import SideSums, combine, hankel, kernel_coefficients, solve
from estimation.reading import Reading, read_fit
from estimation.sample import Sample, SideName
from estimation.squares import FITTED
from estimation.sweep import Sweep as Sweep
from estimation.sweep import interval_rows
from estimation.sweep import leading_interval as leading_interval

# Widths that a clustered sweep answers between two looks at whether to stop.
_AT_ONCE = 10


@dataclass(frozen=True, slots=True, kw_only=True)
class CurveSide:
    """One side's fitted curve with its pointwise band, each shape (points,); x is score minus cutoff."""

    x: Vector
    fit: Vector
    low: Vector
    high: Vector


@dataclass(frozen=True, slots=True, kw_only=True)
class Curve:
    """The local fits on both sides."""

    below: CurveSide
    above: CurveSide


@dataclass(frozen=True, slots=True, kw_only=True)
class BinSide:
    """Binned means of one side, from the line outward: centre (score minus cutoff), mean, rows; empty bins left out."""

    centre: Vector
    mean: Vector
    count: Codes


@dataclass(frozen=True, slots=True, kw_only=True)
class Bins:
    """Binned means on both sides."""

    below: BinSide
    above: BinSide


@dataclass(frozen=True, slots=True, kw_only=True)
class Line:
    """A sample with its running sums and the choices that are asked of it.

    Attributes
    ----------
    sample
        Rows of both sides, donut taken out, without covariates.
    ladder
        Its running sums.
    with_covariates, covariate_ladder
        The rows that have every covariate, with them; None where the study has none.
    choices
        How the effect is estimated.
    curvature
        Bounds on the second derivative, shape (targets,): the outcome's, then take-up's.
    spread
        What the first bandwidth needs of the scores.
    clusters, covariate_clusters
        Sums by cluster of either sample; None without clusters.
    cap
        Largest width (below, above), where rows further out belong to another line: half-way to the next step.
    squared
        Ladders `with_squares`, by whether they hold covariates: made when "hc0" or "hc1" is first asked for, and
        shared by every copy of the line.
    """

    sample: Sample
    ladder: Ladder
    choices: Choices
    curvature: Vector
    spread: ScoreSpread
    with_covariates: Sample | None = None
    covariate_ladder: Ladder | None = None
    clusters: ClusterLadder | None = None
    covariate_clusters: ClusterLadder | None = None
    cap: tuple[float, float] = (np.inf, np.inf)
    squared: dict[bool, Ladder] = field(default_factory=dict, repr=False, compare=False)

    @classmethod
    def prepare(cls, sample: Sample, choices: Choices, with_covariates: Sample | None = None) -> Line:
        """Sum the rows once.

        Parameters
        ----------
        sample
            Rows of both sides, before any donut, values without covariates.
        with_covariates
            The same line with covariates among the values (and fewer rows where some are missing).
        """
        kept = sample.without_donut(choices.donut)
        ladder = Ladder.build(kept, kernel=choices.kernel, order=choices.order)
        full = None if with_covariates is None else with_covariates.without_donut(choices.donut)
        line = cls(
            sample=kept,
            ladder=ladder,
            choices=choices,
            curvature=_curvature(ladder, choices),
            spread=ScoreSpread.of(kept),
            with_covariates=full,
            covariate_ladder=(
                None
                if full is None
                else Ladder.build(full, kernel=choices.kernel, order=choices.order, adjust=True)
            ),
            clusters=_by_cluster(kept, choices),
            covariate_clusters=None if full is None else _by_cluster(full, choices),
        )
        return line._ready()

    def choosing(self, choices: Choices) -> Line:
        """The same line under other choices; sums are kept unless the choices need other ones."""
        old = self.choices
        if (choices.kernel, choices.donut) != (old.kernel, old.donut) or choices.order > self.ladder.order:
            raise ValueError("these choices need the rows summed again")
        return replace(self, choices=choices, curvature=_curvature(self.ladder, choices))._ready()

    def _ready(self) -> Line:
        """Itself, with what its variance needs summed, so that the first reading is as quick as the others."""
        if self.on_ladder:
            self._sums(adjust=False)
            if self.with_covariates is not None:
                self._sums(adjust=True)
        return self

    def _sums(self, *, adjust: bool) -> Ladder:
        """The ladder that answers for the choices' variance, without or with covariates."""
        sample, ladder = (
            (self.with_covariates, self.covariate_ladder) if adjust else (self.sample, self.ladder)
        )
        if sample is None or ladder is None:
            raise CannotEstimate(
                "There is no covariate to adjust for.", "Name covariates in the study first."
            )
        if self.clusters is not None or self.choices.variance not in FITTED:
            return ladder
        if adjust not in self.squared:
            self.squared[adjust] = ladder.with_squares(sample)
        return self.squared[adjust]

    @property
    def _row_variance(self) -> str:
        """What a ladder is asked for: clusters put their own variance in its place."""
        return "neighbour" if self.clusters is not None else self.choices.variance

    @property
    def fuzzy(self) -> bool:
        """Whether take-up stands beside the outcome."""
        return self.sample.has_take_up

    @property
    def on_ladder(self) -> bool:
        """Whether readings come from running sums, at once for any number of rows: all but "hc2" and "hc3", whose
        leverages differ from row to row; with clusters every variance does."""
        return self.choices.variance in ("neighbour", *FITTED) or self.clusters is not None

    def bandwidths(self) -> Bandwidths:
        """What the choices ask for; covariates never move it."""
        return self._capped(choose_bandwidths(self.ladder, self.spread, self.choices))

    def at(self, bandwidth: float) -> Bandwidths:
        """One width for both sides, with the pilot that the choices ask for."""
        pilot = self._fixed_pilot()
        return self._capped(Bandwidths.common(bandwidth, pilot))

    def _capped(self, widths: Bandwidths) -> Bandwidths:
        below, above = self.cap
        return replace(
            widths,
            below=min(widths.below, below),
            above=min(widths.above, above),
            pilot_below=min(widths.pilot_below, below),
            pilot_above=min(widths.pilot_above, above),
        )

    def _fixed_pilot(self) -> float | None:
        """The pilot where it does not follow the bandwidth."""
        if self.choices.pilot == "same":
            return None
        return choose_bandwidths(self.ladder, self.spread, replace(self.choices, bandwidth=1.0)).pilot_below

    def fit(self, bandwidths: Bandwidths, *, adjust: bool = False) -> LineFit:
        """The fit at one pair of widths, with the study's variance, covariates taken off where asked."""
        fit = self._raw_fit(bandwidths, adjust=adjust)
        return adjusted(fit, 1 + int(self.fuzzy)) if adjust else fit

    def _raw_fit(self, bandwidths: Bandwidths, *, adjust: bool, covariates: bool | None = None) -> LineFit:
        """The fit with covariates among its variables where `covariates` (as `adjust` unless given)."""
        wide = adjust if covariates is None else covariates
        order, variance = self.choices.order, self.choices.variance
        if self.on_ladder:
            fit = self._sums(adjust=wide).fit(
                bandwidths, order=order, adjust=adjust, variance=self._row_variance
            )
            clusters = self.covariate_clusters if wide else self.clusters
            return fit if clusters is None else self._clustered(fit, clusters, bandwidths)
        sample = self.with_covariates if wide else self.sample
        if sample is None:
            raise CannotEstimate(
                "There is no covariate to adjust for.", "Name covariates in the study first."
            )
        return fit_rows(
            sample,
            bandwidths,
            kernel=self.choices.kernel,
            order=order,
            variance=variance,
            adjust=adjust,
        )

    def _clustered(self, fit: LineFit, clusters: ClusterLadder, bandwidths: Bandwidths) -> LineFit:
        spread = clusters.spread(bandwidths, order=self.choices.order, variance=self.choices.variance)
        return replace(
            fit,
            covariance=spread.covariance,
            robust_covariance=spread.robust_covariance,
            clusters=spread.clusters,
        )

    def cluster_changes(self, bandwidths: Bandwidths, *, adjust: bool = False) -> ClusterChanges | None:
        """What each cluster does to the jump of the outcome (and of take-up); None without clusters.

        Signed like the effect. With `adjust`, of the outcome less the covariates' part.
        """
        clusters = self.covariate_clusters if adjust else self.clusters
        if clusters is None:
            return None
        found = clusters.changes(bandwidths, order=self.choices.order, variance=self.choices.variance)
        targets, sign = 1 + int(self.fuzzy), self.sample.treated_sign
        combine = np.eye(targets, found.plain.shape[1])
        if adjust:
            fit = self._raw_fit(bandwidths, adjust=True)
            combine[:, targets:] = -fit.adjustment.T
        return replace(found, plain=sign * found.plain @ combine.T, robust=sign * found.robust @ combine.T)

    def covariate_jumps(self, bandwidths: Bandwidths) -> tuple[Vector, Vector]:
        """Each covariate's jump at the line and its standard error, as if it were an outcome, shape (k,)."""
        if self.with_covariates is None or self.covariate_ladder is None:
            return np.zeros(0), np.zeros(0)
        first = 1 + int(self.fuzzy)
        fit = self._raw_fit(bandwidths, adjust=False, covariates=True)
        error = np.sqrt(np.maximum(np.diagonal(fit.robust_covariance)[first:], 0.0))
        return fit.robust_jump[first:], error

    def reading(self, bandwidths: Bandwidths, *, adjust: bool | None = None) -> Reading:
        """The effect with its intervals; adjusted as the choices say unless told otherwise."""
        take_off = self.choices.adjust if adjust is None else adjust
        fit = self.fit(bandwidths, adjust=take_off)
        return read_fit(fit, level=self.choices.level, curvature=self.curvature, fuzzy=self.fuzzy)

    def sweep(self, bandwidth: Vector, should_stop: Callable[[], bool] | None = None) -> Sweep:
        """The effect and the study's chosen interval at many common widths.

        Parameters
        ----------
        bandwidth
            Shape (H,).
        should_stop
            Asked between widths where each costs a pass over rows; the rest stay NaN once it answers True.
        """
        if self.on_ladder:
            return self._sweep_of_sums(bandwidth, should_stop)
        rows = np.full((4, len(bandwidth)), np.nan)
        counts = np.zeros((2, len(bandwidth)), dtype=np.int64)
        for i, width in enumerate(bandwidth):
            if should_stop is not None and should_stop():
                break
            try:
                reading = self.reading(self.at(float(width)))
            except CannotEstimate:
                continue
            low, high = leading_interval(reading, self.choices.interval)
            rows[:, i] = (reading.estimate, reading.std_error, low, high)
            counts[:, i] = (reading.count_below, reading.count_above)
        return Sweep.of(bandwidth, rows, counts)

    def _sweep_of_sums(self, bandwidth: Vector, should_stop: Callable[[], bool] | None) -> Sweep:
        """A sweep off the ladder: all widths together where nothing else costs, else some at a time."""
        asked = Widths.common(bandwidth, self._fixed_pilot())
        widths = Widths(
            below=np.minimum(asked.below, self.cap[0]),
            above=np.minimum(asked.above, self.cap[1]),
            pilot_below=np.minimum(asked.pilot_below, self.cap[0]),
            pilot_above=np.minimum(asked.pilot_above, self.cap[1]),
        )
        slow = self.clusters is not None or (self.fuzzy and self.choices.interval == "bias-aware")
        together = _AT_ONCE if slow else max(len(bandwidth), 1)
        rows = np.full((4, len(bandwidth)), np.nan)
        counts = np.zeros((2, len(bandwidth)), dtype=np.int64)
        for start in range(0, len(bandwidth), together):
            if should_stop is not None and should_stop():
                break
            some = slice(start, start + together)
            rows[:, some], counts[:, some] = self._answers(widths.part(some))
        return Sweep.of(bandwidth, rows, counts)

    def _answers(self, widths: Widths) -> tuple[Matrix, Codes]:
        """(estimate, error, low, high), shape (4, H), and rows of each side, shape (2, H); NaN where no fit runs."""
        adjust, order = self.choices.adjust, self.choices.order
        ladder = self._sums(adjust=adjust)
        bias = self.choices.interval == "bias-aware"
        fits = ladder.fits(widths, order=order, adjust=adjust, variance=self._row_variance, unit_bias=bias)
        clusters = self.covariate_clusters if adjust else self.clusters
        if clusters is not None:
            fits = clusters.clustered(fits, widths, order=order, variance=self.choices.variance)
        if adjust:
            fits = fits.adjusted(ladder.targets)
        rows = interval_rows(
            fits,
            which=self.choices.interval,
            level=self.choices.level,
            curvature=self.curvature,
            fuzzy=self.fuzzy,
            enough=ladder.enough(widths, order=order),
        )
        return rows, np.stack((fits.count_below, fits.count_above))

    def curve(self, bandwidths: Bandwidths, points: int = 60) -> Curve:
        """Both local fits from the line to the edge of the bandwidth, with pointwise plain intervals."""

        def side_curve(side: SideSums, name: SideName) -> CurveSide:
            width = bandwidths.of(name)[0]
            u = np.linspace(0.0, 1.0, points)
            fit, error = _curve_of(side, width, self.ladder.kernel, self.choices.order, u)
            reach = quantile(self.choices.level) * error
            sign = -1.0 if name == "below" else 1.0
            return CurveSide(x=sign * u * width, fit=fit, low=fit - reach, high=fit + reach)

        return Curve(
            below=side_curve(self.ladder.below, "below"), above=side_curve(self.ladder.above, "above")
        )

    def bins(self, reach: float, count: int, *, variable: int = 0) -> Bins:
        """Means of `count` equal bins a side out to `reach`, from running sums."""

        def side_bins(side: SideSums, sign: float) -> BinSide:
            edges = np.linspace(0.0, reach, count + 1)
            edges[-1] *= 1.0 + 1e-12  # a row at exactly the reach belongs to the last bin
            sums = side.raw(edges[1:], np.full(count, reach), "triangular")[:, 0]
            sums = np.diff(np.concatenate((np.zeros((1, sums.shape[1]), sums.dtype), sums)), axis=0)
            rows = np.diff(side.count(edges[1:], "triangular"), prepend=0)
            filled = rows > 0
            total = np.where(filled, sums[:, 0], 1.0)
            mean = (sums[:, 1 + variable] / total + side.centre[variable]).astype(np.float64)
            centre = sign * 0.5 * (edges[:-1] + edges[1:])
            return BinSide(centre=centre[filled], mean=mean[filled], count=rows[filled])

        return Bins(below=side_bins(self.ladder.below, -1.0), above=side_bins(self.ladder.above, 1.0))

    @property
    def binary(self) -> bool:
        """Whether the outcome is nought or one in every row."""
        return all(bool(np.isin(side.outcome, (0.0, 1.0)).all()) for _, side in self.sample.sides)


def _curve_of(side: SideSums, width: float, kernel: str, order: int, u: Vector) -> tuple[Vector, Vector]:
    """Fitted outcome and its standard error at d = u·width, each shape (points,)."""
    h = np.array([width])
    raw = side.raw(h, h, kernel)
    shape = kernel_coefficients(kernel)
    size = order + 1
    moments = combine(raw, shape, 2 * size)
    identity = np.eye(size, dtype=np.longdouble)[None]
    inverse = solve(hankel(moments[:, :, 0], size), identity)[0]
    coefficients = inverse @ moments[0, :size, 1]
    squares = combine(raw, np.convolve(shape, shape), 2 * size - 1)[0, :, side.channels.spread.start]
    index = np.arange(size)
    spread = inverse @ squares[index[:, None] + index[None, :]] @ inverse
    basis = np.vander(u, size, increasing=True)
    fit = (basis @ coefficients + side.centre[0]).astype(np.float64)
    error = np.sqrt(np.maximum(np.einsum("ni,ij,nj->n", basis, spread, basis), 0.0)).astype(np.float64)
    return fit, error


def _by_cluster(sample: Sample, choices: Choices) -> ClusterLadder | None:
    if sample.below.cluster is None:
        return None
    return ClusterLadder.build(sample, kernel=choices.kernel, order=choices.order)


def _curvature(ladder: Ladder, choices: Choices) -> Vector:
    bounds = rule_of_thumb_curvature(ladder)
    if not isinstance(choices.curvature, str):
        bounds[0] = choices.curvature
    return bounds
