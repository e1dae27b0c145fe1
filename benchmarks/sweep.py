"""A sweep of 200 bandwidths with robust standard errors, against a loop of general-purpose weighted fits.

Run: python benchmarks/sweep.py [rows ...]

Columns: rows; the sort and one pass over the columns (the floor: nobody answers without reading the data);
preparing the line (sums kept once); 200 widths from the sums; one width from the sums; the loop of
statsmodels WLS with HC1 on both sides, measured on 5 widths and scaled to 200; the ratios.
"""

from __future__ import annotations

import sys
import time

import numpy as np
import statsmodels.api as sm

from estimation.choices import Choices
from estimation.line import Line
from estimation.sample import build_sample


def draw(rows: int) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(20)
    x = rng.uniform(-1.0, 1.0, rows)
    return x, np.sin(2.0 * x) + 0.2 * (x >= 0.0) + rng.normal(0.0, 0.5, rows)


def one_general_fit(x: np.ndarray, y: np.ndarray, bandwidth: float) -> float:
    """Local linear with a triangular kernel, both sides in one weighted regression, HC1."""
    inside = np.abs(x) < bandwidth
    near, outcome = x[inside], y[inside]
    above = (near >= 0.0).astype(float)
    design = np.column_stack((np.ones(len(near)), above, near, above * near))
    fit = sm.WLS(outcome, design, weights=1.0 - np.abs(near) / bandwidth).fit(cov_type="HC1")
    return float(fit.params[1] + fit.bse[1])


def main(sizes: list[int]) -> None:
    print(
        "| rows | sort + one pass | prepare | 200 widths | one width | loop of general fits (200) | loop / ours | ours / floor |"
    )
    print("|---:|---:|---:|---:|---:|---:|---:|---:|")
    for rows in sizes:
        x, y = draw(rows)
        start = time.perf_counter()
        order = np.argsort(x)
        _ = (x[order].sum(), y[order].sum())
        floor = time.perf_counter() - start

        start = time.perf_counter()
        sample = build_sample(position=x, outcome=y, above=x >= 0.0, treated="above", score_magnitude=1.0)
        line = Line.prepare(sample, Choices())
        prepare = time.perf_counter() - start

        widths = np.linspace(0.02, 1.0, 200)
        start = time.perf_counter()
        line.sweep(widths)
        sweep = time.perf_counter() - start

        start = time.perf_counter()
        for _ in range(50):
            line.reading(line.at(0.37))
        one = (time.perf_counter() - start) / 50

        start = time.perf_counter()
        for width in np.linspace(0.02, 1.0, 5):
            one_general_fit(x, y, float(width))
        loop = (time.perf_counter() - start) * 40
        print(
            f"| {rows:,} | {floor:.3f} s | {prepare:.3f} s | {1e3 * sweep:.1f} ms | {1e3 * one:.2f} ms | {loop:.1f} s "
            f"| {loop / sweep:,.0f} | {(prepare + sweep) / floor:.2f} |",
            flush=True,
        )


if __name__ == "__main__":
    main([int(float(a)) for a in sys.argv[1:]] or [100_000, 1_000_000, 10_000_000])
