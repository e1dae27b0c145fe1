"""The weights that are drawn are those of the row-wise fits, and they reproduce effect and bias-corrected centre."""

import numpy as np
import pytest

from estimation.ladder import Ladder
from estimation.line_fit import Bandwidths
from estimation.local_polynomial import fit_rows, fit_side
from estimation.sample import Sample, Side, build_sample
from estimation.unit_weights import SideWeights, unit_weights


def homes(*, weighted: bool, ties: bool, treated: str) -> Sample:
    draw = np.random.default_rng(5)
    need = draw.normal(size=700)
    if ties:
        need = np.round(need, 1)
    return build_sample(
        position=need,
        outcome=3.0 + np.sin(need) + (need >= 0) + draw.normal(size=700),
        above=need >= 0,
        treated=treated,  # type: ignore[arg-type]
        weight=draw.uniform(0.5, 2.0, 700) if weighted else None,
    )


def by_rows(side: Side, bandwidth: float, pilot: float, kernel: str, order: int) -> tuple[np.ndarray, ...]:
    """(plain, bias-corrected) weight of every row of a side, from the fits by QR; zero outside."""
    near = fit_side(side, bandwidth=bandwidth, kernel=kernel, order=order)
    far = fit_side(side, bandwidth=pilot, kernel=kernel, order=order + 1)
    plain, corrected = np.zeros(len(side)), np.zeros(len(side))
    inside, inside_pilot = near.weights.shape[1], far.weights.shape[1]
    plain[:inside] = corrected[:inside] = near.weights[0]
    left_over = near.weights[0] @ side.distance[:inside] ** (order + 1)
    corrected[:inside_pilot] -= left_over * far.weights[order + 1]
    return plain, corrected


@pytest.mark.parametrize("treated", ["above", "below"])
@pytest.mark.parametrize(("weighted", "ties"), [(False, False), (True, True)])
@pytest.mark.parametrize("kernel", ["triangular", "uniform", "epanechnikov"])
@pytest.mark.parametrize("order", [0, 1, 2])
@pytest.mark.parametrize("widths", [(0.9, 1.1, 0.9, 1.1), (0.8, 1.2, 1.3, 0.9)])
def test_weights_are_those_of_the_row_wise_fit(
    widths: tuple[float, ...], order: int, kernel: str, weighted: bool, ties: bool, treated: str
) -> None:
    sample = homes(weighted=weighted, ties=ties, treated=treated)
    below, above, pilot_below, pilot_above = widths
    at = Bandwidths(below=below, above=above, pilot_below=pilot_below, pilot_above=pilot_above, rule="chosen")
    found = unit_weights(
        Ladder.build(sample, kernel=kernel, order=order), at, order=order, treated_sign=sample.treated_sign
    )
    sums = np.zeros(2)
    for name, side in sample.sides:
        bandwidth, pilot = at.of(name)
        drawn: SideWeights = getattr(found, name)
        sign = sample.treated_sign * (1.0 if name == "above" else -1.0)
        plain, corrected = by_rows(side, bandwidth, pilot, kernel, order)
        scale = np.abs(corrected).max()
        own = np.ones(len(side)) if side.weight is None else side.weight
        # Weights of rows, read off the drawn curve where a row lies on one of its points or between two of them.
        inside = side.distance <= min(bandwidth, pilot) * 0.99
        read = own * np.interp(side.distance, drawn.distance, drawn.plain)
        np.testing.assert_allclose(read[inside], sign * plain[inside], rtol=0, atol=2e-3 * scale)
        read = own * np.interp(side.distance, drawn.distance, drawn.corrected)
        np.testing.assert_allclose(read[inside], sign * corrected[inside], rtol=0, atol=5e-3 * scale)
        # At the nearest unit nothing is read off between points.
        assert drawn.distance[0] == side.distance[0]
        assert drawn.plain[0] * own[0] == pytest.approx(sign * plain[0], rel=1e-9)
        assert drawn.corrected[0] * own[0] == pytest.approx(sign * corrected[0], rel=1e-9)
        assert drawn.total == pytest.approx(own[plain != 0].sum(), rel=1e-9)
        _shares_are_sums_over_rows(drawn, side, sign * plain, sign * corrected)
        sums += [drawn.share.plain.sum() * sign, drawn.share.corrected.sum() * sign]
    np.testing.assert_allclose(sums, [2.0, 2.0], rtol=1e-9)
    # They are the weights of the effect: the slow fit's own numbers come out of them.
    fit = fit_rows(sample, at, kernel=kernel, order=order, variance="neighbour")
    jump = sum(
        (1.0 if name == "above" else -1.0) * sample.treated_sign * by_rows(side, *at.of(name), kernel, order)[1] @ side.outcome
        for name, side in sample.sides
    )  # fmt: skip
    assert jump == pytest.approx(float(fit.robust_jump[0]), rel=1e-9)


def _shares_are_sums_over_rows(
    drawn: SideWeights, side: Side, plain: np.ndarray, corrected: np.ndarray
) -> None:
    share = drawn.share
    for i in range(len(share.low)):
        # A row on the wall between two stretches belongs to the nearer or the farther one as the kernel's edge says.
        last = i + 1 == len(share.low)
        if np.isin(side.distance, share.low[1:]).any():
            return
        held = (side.distance >= share.low[i]) & (
            (side.distance <= share.high[i]) if last else (side.distance < share.high[i])
        )
        assert share.count[i] == held.sum()
        np.testing.assert_allclose(share.plain[i], plain[held].sum(), rtol=1e-8, atol=1e-10)
        np.testing.assert_allclose(share.corrected[i], corrected[held].sum(), rtol=1e-8, atol=1e-10)


def test_far_units_count_against_their_own_side_with_a_line_but_not_with_a_mean() -> None:
    sample = homes(weighted=False, ties=False, treated="above")
    at = Bandwidths.common(1.0)
    for order, turns in ((0, False), (1, True)):
        found = unit_weights(
            Ladder.build(sample, kernel="triangular", order=order), at, order=order, treated_sign=1.0
        )
        assert (found.above.plain < 0).any() == turns
        assert (found.below.plain > 0).any() == turns
