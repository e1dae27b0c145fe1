"""All sites at once against one ladder a site: fits, bandwidths, and sites that can't be fitted."""

import numpy as np
import pytest

from estimation.choices import Choices
from estimation.errors import CannotEstimate
from estimation.line import Line
from estimation.line_fit import Bandwidths
from estimation.line_shares import shares_at_line
from estimation.sample import Sample, build_sample
from estimation.site_bandwidths import choose_site_widths, score_spreads
from estimation.site_ladder import SiteLadder

SIZES = (900, 60, 0, 300, 9, 130, 2000, 70)


def draw(
    seed: int = 0, *, lumpy: bool = False, weighted: bool = False, fuzzy: bool = False
) -> dict[str, np.ndarray]:
    rng = np.random.default_rng(seed)
    site = rng.permutation(np.repeat(np.arange(len(SIZES)), SIZES))
    n = len(site)
    x = rng.normal(0, 1 + 0.2 * site, n)
    if lumpy:
        x = np.round(x, 1)
    above = x >= 0
    took = (rng.uniform(size=n) < 0.15 + 0.6 * above).astype(float)
    y = 100 * site + np.sin(x) + (1 + site) * took + rng.normal(0, 1, n)
    return {
        "position": x,
        "outcome": y,
        "above": above,
        "site": site,
        "take_up": took if fuzzy else np.zeros(0),
        "weight": rng.uniform(0.5, 2, n) if weighted else np.zeros(0),
    }


def ladder_of(data: dict[str, np.ndarray], kernel: str, order: int, treated: str) -> SiteLadder:
    fuzzy, weighted = len(data["take_up"]) > 0, len(data["weight"]) > 0
    columns = (data["outcome"], data["take_up"]) if fuzzy else (data["outcome"],)
    return SiteLadder.build(
        position=data["position"],
        values=np.column_stack(columns),
        above=data["above"],
        site=data["site"],
        sites=len(SIZES),
        weight=data["weight"] if weighted else None,
        treated=treated,  # type: ignore[arg-type]
        kernel=kernel,
        order=order,
        has_take_up=fuzzy,
        score_magnitude=20.0,
    )


def sample_of(data: dict[str, np.ndarray], site: int, treated: str) -> Sample:
    rows = data["site"] == site
    return build_sample(
        position=data["position"][rows],
        outcome=data["outcome"][rows],
        above=data["above"][rows],
        treated=treated,  # type: ignore[arg-type]
        take_up=data["take_up"][rows] if len(data["take_up"]) else None,
        weight=data["weight"][rows] if len(data["weight"]) else None,
        score_magnitude=20.0,
    )


@pytest.mark.parametrize("kernel", ["triangular", "uniform", "epanechnikov"])
@pytest.mark.parametrize(("order", "treated"), [(0, "above"), (1, "above"), (1, "below"), (2, "above")])
@pytest.mark.parametrize(("lumpy", "weighted", "fuzzy"), [(False, True, False), (True, False, True)])
def test_every_site_is_its_own_ladder(
    kernel: str, order: int, treated: str, lumpy: bool, weighted: bool, fuzzy: bool
) -> None:
    data = draw(order, lumpy=lumpy, weighted=weighted, fuzzy=fuzzy)
    ladder = ladder_of(data, kernel, order, treated)
    rng = np.random.default_rng(5)
    below, above = rng.uniform(0.8, 2.0, (2, len(SIZES)))
    pilots = rng.uniform(0.9, 2.2, (2, len(SIZES)))
    for wide in (None, pilots):
        fits = ladder.fits(below, above, *([] if wide is None else wide))
        checked = 0
        for s, rows in enumerate(SIZES):
            if rows < 50:
                continue
            line = Line.prepare(sample_of(data, s, treated), Choices(kernel=kernel, order=order))
            own = (below[s], above[s]) if wide is None else (wide[0][s], wide[1][s])
            widths = Bandwidths(
                below=below[s], above=above[s], pilot_below=own[0], pilot_above=own[1], rule="chosen"
            )
            single = line.fit(widths)
            checked += 1
            assert fits.jump[s] == pytest.approx(single.jump, rel=1e-9, abs=1e-11)
            assert fits.robust_jump[s] == pytest.approx(single.robust_jump, rel=1e-8, abs=1e-10)
            assert fits.covariance[s] == pytest.approx(single.covariance, rel=1e-8, abs=1e-12)
            assert fits.robust_covariance[s] == pytest.approx(single.robust_covariance, rel=1e-7, abs=1e-11)
            assert (fits.count_below[s], fits.count_above[s]) == (single.count_below, single.count_above)
        assert checked == 6


def test_a_site_that_cannot_be_fitted_is_unknown_and_spoils_no_other() -> None:
    data = draw(3)
    # The site of 300 keeps its lower side only; the site of 60 has three scores a side.
    few = data["site"] == 1
    data["position"][few] = np.sign(data["position"][few]) * (1 + np.arange(few.sum()) % 3)
    keep = ~((data["site"] == 3) & data["above"])
    data = {key: column[keep] if len(column) else column for key, column in data.items()}
    fits = ladder_of(data, "triangular", 1, "above").fits(np.full(8, 2.5), np.full(8, 2.5))
    for s, known in enumerate((True, False, False, False, None, True, True, True)):
        if known is not None:
            assert np.isfinite(fits.robust_jump[s, 0]) == known
        try:
            Line.prepare(sample_of(data, s, "above"), Choices(curvature=1.0)).fit(Bandwidths.common(2.5))
        except CannotEstimate:
            assert np.isnan(fits.robust_jump[s, 0])
        else:
            assert np.isfinite(fits.robust_jump[s, 0])
    assert fits.count_above[3] == 0 and fits.count_below[3] > 0
    assert (fits.distinct_below[1], fits.distinct_below[2]) == (2, 0)


@pytest.mark.parametrize("kernel", ["triangular", "uniform", "epanechnikov"])
@pytest.mark.parametrize("rule", ["mse", "coverage", "mse per side", 1.5, (1.2, 2.0)])
@pytest.mark.parametrize(
    ("order", "treated", "fuzzy"), [(1, "above", False), (1, "below", True), (2, "above", False)]
)
def test_every_site_chooses_its_own_width(
    kernel: str, rule: str | float | tuple[float, float], order: int, treated: str, fuzzy: bool
) -> None:
    data = draw(7, fuzzy=fuzzy, lumpy=fuzzy, weighted=not fuzzy)
    choices = Choices(kernel=kernel, order=order, bandwidth=rule)
    ladder = ladder_of(data, kernel, order, treated)
    rows, spread = np.zeros(len(SIZES), dtype=np.int64), np.ones(len(SIZES))
    lines = {}
    for s, size in enumerate(SIZES):
        if size < 50:
            continue
        lines[s] = Line.prepare(sample_of(data, s, treated), choices)
        rows[s], spread[s] = lines[s].spread.rows, lines[s].spread.width
    own_rows, own_spread = score_spreads(ladder)
    for s in lines:
        assert (own_rows[s], own_spread[s]) == (rows[s], pytest.approx(spread[s], rel=1e-12))
    found = choose_site_widths(ladder, rows, spread, choices)
    assert found is not None
    for s, line in lines.items():
        single = line.bandwidths()
        assert found.below[s] == pytest.approx(single.below, rel=1e-7)
        assert found.above[s] == pytest.approx(single.above, rel=1e-7)
    if isinstance(rule, str):
        assert np.isnan(found.below[2])


@pytest.mark.parametrize("order", [1, 2])
def test_shares_at_the_line_are_those_of_the_rows(order: int) -> None:
    data = draw(8, weighted=True)
    found = ladder_of(data, "triangular", order, "above").shares_at_line(1.5, 1.8)
    sample = build_sample(
        position=data["position"],
        outcome=data["outcome"],
        above=data["above"],
        treated="above",
        weight=data["weight"],
    )
    slow = [
        shares_at_line(
            side, data["site"][side.row], len(SIZES), bandwidth=width, kernel="triangular", order=order
        )
        for (_, side), width in zip(sample.sides, (1.5, 1.8))
    ]
    assert found == pytest.approx(np.mean(slow, axis=0), rel=1e-9, abs=1e-12)
    assert found.sum() == pytest.approx(1.0, rel=1e-12)


def test_rules_that_need_each_line_are_left_to_it() -> None:
    data = draw(1)
    ladder = ladder_of(data, "triangular", 1, "above")
    for choices in (Choices(bandwidth="bias-aware"), Choices(pilot="mse")):
        assert choose_site_widths(ladder, np.ones(8, dtype=np.int64), np.ones(8), choices) is None
