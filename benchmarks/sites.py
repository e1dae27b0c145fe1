"""Many sites: all of them estimated and put together, against one analysis of the same rows at a single cutoff.

Run: python benchmarks/sites.py [sites rows]

Both sides start from rows that are read already. The single analysis is what the bench does when an outcome is first looked
at: sort, running sums, bandwidth, the three answers, a sweep of 50 widths. The comparison is what its Compare screen
does: every site's sums, own bandwidth and interval, the pooled effect, shares, heterogeneity, shrunken effects, band,
trend, leaving one out. Then a common width is moved over 200 sites, as a held arrow key does.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np

from study.analysis import Workbench
from study.assemble import REASONS, Assigned
from study.comparison import compare
from study.document import Study, parse_study

_CUTOFF = '[assignment]\nrule = "cutoff"\ncutoff = 0.0\n'


def assigned_rows(sites: int, rows: int, *, several: bool) -> Assigned:
    """Rows as the readers leave them: one line, or a line a site."""
    rng = np.random.default_rng(31)
    site = rng.integers(0, sites, rows)
    position = rng.normal(0.0, 10.0, rows)
    cutoffs = np.linspace(30.0, 60.0, sites)[site]
    outcome = (
        np.sin(position / 12.0) + (1.0 + 0.5 * np.cos(site)) * (position >= 0.0) + rng.normal(0, 1, rows)
    )
    return Assigned(
        position=position,
        above=position >= 0.0,
        treated="above",
        site=site if several else None,
        site_names=tuple(f"Site {s}" for s in range(sites)) if several else (),
        cutoffs=cutoffs,
        outcomes={"y": outcome},
        take_up=None,
        weight=None,
        cluster=None,
        covariates={},
        reason=np.zeros(rows, dtype=np.int64),
        reasons=REASONS,
        rows_read=rows,
        dropped={},
        fingerprint="",
        row=np.arange(rows),
    )


def study_of(sites: int, *, several: bool) -> Study:
    """The study that belongs to the rows."""
    text = '[study]\nmasked = false\n[columns]\noutcomes = ["y"]\nscore = "x"\nsite = "s"\n'
    if not several:
        return parse_study(text + _CUTOFF, Path("study.toml"))
    table = "\n".join(f'"Site {s}" = 0.0' for s in range(sites))
    return parse_study(
        text + f'[assignment]\nrule = "cutoffs"\n[assignment.sites]\n{table}\n', Path("study.toml")
    )


def clock(work: Callable[[], object]) -> float:
    start = time.perf_counter()
    work()
    return time.perf_counter() - start


def single(bench: Workbench) -> None:
    bench.effect("y")
    bench.sweep("y", bench.sweep_grid("y", 50))


def compared_with_single(sites: int, rows: int) -> None:
    one, many = (assigned_rows(sites, rows, several=several) for several in (False, True))
    # The best of three, each from a bench that has computed nothing yet: a shared machine only ever adds time.
    alone = min(clock(lambda: single(Workbench(study_of(sites, several=False), one))) for _ in range(3))
    together = min(
        clock(lambda: compare(Workbench(study_of(sites, several=True), many), "y")) for _ in range(3)
    )
    print(f"| {sites:,} | {rows:,} | {alone:.2f} s | {together:.2f} s | {together / alone:.2f} |", flush=True)


def held_key(sites: int, rows: int, moves: int = 60) -> None:
    bench = Workbench(study_of(sites, several=True), assigned_rows(sites, rows, several=True))
    compare(bench, "y")
    took = np.sort([clock(lambda w=w: compare(bench, "y", w)) for w in np.geomspace(2.0, 20.0, moves)])
    print(
        f"| {sites:,} | {rows:,} | {1e3 * np.median(took):.1f} ms | {1e3 * took[int(0.95 * moves)]:.1f} ms |",
        flush=True,
    )


def main(sites: int, rows: int) -> None:
    print("| sites | rows | one line's analysis | all sites compared | ratio |")
    print("|---:|---:|---:|---:|---:|")
    for k, n in ((50, rows // 10), (200, rows), (sites, rows)):
        compared_with_single(k, n)
    print("\n| sites | rows | a step of the common width, median | 95th percentile |")
    print("|---:|---:|---:|---:|")
    for n in (rows // 10, rows):
        held_key(200, n)


if __name__ == "__main__":
    main(*([int(float(a)) for a in sys.argv[1:]] or [2_000, 2_000_000]))
