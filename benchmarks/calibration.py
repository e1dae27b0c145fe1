"""How often the intervals hold the truth, and how long they are, by simulation.

Run: make calibrate      (or python benchmarks/calibration.py [--draws 1000] [--seed 11] [--cells robust,lumpy,…])

Each cell draws many data sets from a design with a known effect and analyses each with the study's defaults.
Monte Carlo standard error at 95 % and 1,000 draws: 0.7 points.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable, Iterable
from concurrent.futures import ProcessPoolExecutor
from dataclasses import replace
from functools import partial

import numpy as np

from estimation.choices import Choices
from estimation.errors import CannotEstimate
from estimation.line import Line
from estimation.randomisation import randomise
from estimation.reading import Reading
from estimation.sample import Sample, build_sample

# Imbens & Kalyanaraman (2012), Calonico, Cattaneo & Titiunik (2014): coefficients by power, below and above, and
# the effect (from memory); the largest |second derivative| of either side on [−1, 1] (computed).
DESIGNS = {
    1: ((0.48, 1.27, 7.18, 20.21, 21.54, 7.33), (0.52, 0.84, -3.00, 7.99, -9.01, 3.56), 0.04, 14.36),
    2: ((3.71, 2.30, 3.28, 1.45, 0.23, 0.03), (0.26, 18.49, -54.81, 74.30, -45.02, 9.83), -3.45, 109.62),
    3: ((0.48, 1.27, -3.59, 14.147, 23.694, 10.995), (0.52, 0.84, -0.30, -2.397, -0.901, 3.56), 0.04, 45.41),
}
NOISE = 0.1295
Hits = dict[str, tuple[bool, float]]


def curve(design: int, x: np.ndarray) -> np.ndarray:
    """The mean outcome of a design."""
    below, above, _, _ = DESIGNS[design]
    value = np.polynomial.polynomial.polyval
    return np.where(x < 0.0, value(x, below), value(x, above))


def hit(low: float, high: float, truth: float) -> tuple[bool, float]:
    """Whether an interval holds the truth, and its length."""
    return low <= truth <= high, high - low


def readings(reading: Reading, truth: float) -> Hits:
    """The three intervals of one reading."""
    found = {
        "robust": hit(reading.robust.low, reading.robust.high, truth),
        "plain": hit(reading.plain.low, reading.plain.high, truth),
    }
    if reading.bias_aware is not None:
        found["bias-aware"] = hit(reading.bias_aware.low, reading.bias_aware.high, truth)
    return found


def analyse(sample: Sample, choices: Choices, truth: float) -> Hits:
    """Default analysis, and the bias-aware one at its own width."""
    line = Line.prepare(sample, choices)
    found = readings(line.reading(line.bandwidths()), truth)
    if not isinstance(choices.curvature, str):
        own = line.choosing(replace(choices, bandwidth="bias-aware"))
        found["bias-aware, own width"] = readings(own.reading(own.bandwidths()), truth)["bias-aware"]
    return found


def smooth(
    rng: np.random.Generator, design: int, rows: int, rounding: float = 0.0, heaped: bool = False
) -> Hits:
    """A published design; optionally with a rounded score, or with a third of the rows heaped on tenths."""
    x = 2.0 * rng.beta(2.0, 4.0, rows) - 1.0
    truth, bound = DESIGNS[design][2:]
    if rounding:
        # Rounded down, so that a score and the side it falls on go together, as when an agency truncates.
        x = np.floor(x / rounding) * rounding
    if heaped:
        x = np.where(rng.uniform(size=rows) < 1 / 3, np.floor(x * 10.0) / 10.0, x)
    y = curve(design, x) + rng.normal(0.0, NOISE, rows)
    sample = build_sample(position=x, outcome=y, above=x >= 0.0, treated="above", score_magnitude=1.0)
    return analyse(sample, Choices(curvature=bound), truth)


def clustered(rng: np.random.Generator, clusters: int, rows: int = 4000, correlation: float = 0.2) -> Hits:
    """Outcomes that share a cluster effect (ICC 0.2); clusters span the line."""
    x = rng.uniform(-1.0, 1.0, rows)
    code = rng.integers(clusters, size=rows)
    shared = rng.normal(0.0, np.sqrt(correlation), clusters)[code]
    y = 0.5 * np.sin(2.0 * x) + 0.3 * (x >= 0.0) + shared + rng.normal(0.0, np.sqrt(1.0 - correlation), rows)
    sample = build_sample(
        position=x,
        outcome=y,
        above=x >= 0.0,
        treated="above",
        cluster=code.astype(np.int64),
        score_magnitude=1.0,
    )
    return analyse(sample, Choices(curvature=2.0), 0.3)


def clusters_by_side(rng: np.random.Generator, clusters: int, rows: int = 4000) -> Hits:
    """Each cluster has one score, so that a cluster lies on one side."""
    centre = rng.uniform(-1.0, 1.0, clusters)
    code = rng.integers(clusters, size=rows)
    x = centre[code] + rng.uniform(-0.02, 0.02, rows)
    above = centre[code] >= 0.0
    x = np.where(above, np.abs(x), -np.abs(x))
    y = 0.5 * np.sin(2.0 * x) + 0.3 * above + rng.normal(0.0, np.sqrt(0.2), clusters)[code]
    y = y + rng.normal(0.0, np.sqrt(0.8), rows)
    sample = build_sample(
        position=x,
        outcome=y,
        above=above,
        treated="above",
        cluster=code.astype(np.int64),
        score_magnitude=1.0,
    )
    return analyse(sample, Choices(curvature=2.0), 0.3)


def partial_take_up(rng: np.random.Generator, jump: float, rows: int = 2000) -> Hits:
    """Take-up jumps by `jump`; those who would take it anyway differ from the rest."""
    x = rng.uniform(-1.0, 1.0, rows)
    eager = rng.uniform(size=rows)
    took = (eager < 0.1 + 0.05 * x + jump * (x >= 0.0)).astype(float)
    y = np.sin(x) + 1.0 * took + 1.5 * (0.5 - eager) + rng.normal(0.0, 0.5, rows)
    sample = build_sample(
        position=x, outcome=y, above=x >= 0.0, treated="above", take_up=took, score_magnitude=1.0
    )
    line = Line.prepare(sample, Choices(curvature=1.0))
    reading = line.reading(line.bandwidths())
    found = {"ratio, robust": hit(reading.robust.low, reading.robust.high, 1.0)}
    assert reading.take_up is not None
    for name, pieces in (
        ("Anderson–Rubin", reading.take_up.anderson_rubin),
        ("Anderson–Rubin, bias-aware", reading.take_up.honest_anderson_rubin or ()),
    ):
        bounded = len(pieces) == 1 and np.all(np.isfinite(pieces[0]))
        found[name] = (
            any(low <= 1.0 <= high for low, high in pieces),
            pieces[0][1] - pieces[0][0] if bounded else np.inf,
        )
    return found


def no_effect_window(rng: np.random.Generator, rows: int, binary: bool) -> Hits:
    """Local randomisation where there is nothing to find: the share that is NOT rejected, and the length."""
    x = rng.uniform(-1.0, 1.0, rows)
    y = (rng.uniform(size=rows) < 0.3).astype(float) if binary else rng.exponential(1.0, rows)
    drawn = randomise(
        position=x,
        outcome=y,
        above=x >= 0.0,
        treated="above",
        window=(-1.0, 1.0),
        draws=1000,
        seed=int(rng.integers(2**31)),
    )
    return {"not rejected at 5 %": (drawn.p_value > 0.05, 0.0), "interval": hit(drawn.low, drawn.high, 0.0)}


Cell = Callable[[np.random.Generator], Hits]


def cells() -> dict[str, dict[str, Cell]]:
    """Every cell by group."""
    groups: dict[str, dict[str, Cell]] = {
        "published": {},
        "lumpy": {},
        "clusters": {},
        "take-up": {},
        "lot": {},
    }
    for design in DESIGNS:
        for rows in (500, 5000):
            groups["published"][f"design {design}, n = {rows:,}"] = partial(smooth, design=design, rows=rows)
    for design in DESIGNS:
        groups["lumpy"][f"design {design}, score cut to 0.02, n = 2,000"] = partial(
            smooth, design=design, rows=2000, rounding=0.02
        )
        groups["lumpy"][f"design {design}, a third heaped on tenths, n = 2,000"] = partial(
            smooth, design=design, rows=2000, heaped=True
        )
    for count in (20, 40, 100):
        groups["clusters"][f"{count} clusters across the line, ICC 0.2"] = partial(clustered, clusters=count)
        groups["clusters"][f"{count} clusters, each on one side, ICC 0.2"] = partial(
            clusters_by_side, clusters=count
        )
    for jump in (0.1, 0.3, 0.8):
        groups["take-up"][f"take-up jumps by {jump}, n = 2,000"] = partial(partial_take_up, jump=jump)
    for rows in (24, 80, 400):
        groups["lot"][f"skewed outcome, {rows} rows"] = partial(no_effect_window, rows=rows, binary=False)
        groups["lot"][f"binary outcome, {rows} rows"] = partial(no_effect_window, rows=rows, binary=True)
    return groups


def run_some(group: str, name: str, seeds: list[int]) -> list[Hits | None]:
    """Draws of one cell, one seed each; None where no estimate was possible."""
    cell = cells()[group][name]
    results: list[Hits | None] = []
    for seed in seeds:
        try:
            results.append(cell(np.random.default_rng(seed)))
        except CannotEstimate:
            results.append(None)
    return results


def report(name: str, results: Iterable[Hits | None]) -> None:
    """One row an interval."""
    done = [result for result in results if result is not None]
    missing = sum(1 for result in results if result is None)
    for interval in done[0]:
        held = [result[interval][0] for result in done]
        lengths = [result[interval][1] for result in done]
        note = f", {missing} not estimable" if missing else ""
        print(
            f"| {name} | {interval} | {100 * np.mean(held):.1f} % | {np.median(lengths):.3f} | {len(done):,}{note} |",
            flush=True,
        )


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--draws", type=int, default=1000)
    parser.add_argument("--seed", type=int, default=11)
    parser.add_argument("--groups", default="")
    options = parser.parse_args()
    wanted = [group for group in options.groups.split(",") if group] or list(cells())
    print(f"draws {options.draws:,}, seed {options.seed}\n")
    print("| design | interval | holds the truth | median length | draws |\n|---|---|---:|---:|---:|")
    started = time.perf_counter()
    with ProcessPoolExecutor(2) as pool:
        for group in wanted:
            for number, name in enumerate(cells()[group]):
                base = np.random.SeedSequence([options.seed, number]).generate_state(options.draws).tolist()
                parts = [base[i::8] for i in range(8)]
                results = [r for part in pool.map(partial(run_some, group, name), parts) for r in part]
                report(name, results)
    print(f"\n{time.perf_counter() - started:.0f} s on two cores")


if __name__ == "__main__":
    main()
