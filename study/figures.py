"""Small pictures as lines of text, for the headless run. One module wraps the plotting library: it keeps global state."""

from __future__ import annotations

import threading
from collections.abc import Sequence
from dataclasses import replace

from estimation.line import Bins, Curve, CurveSide

_ONE_AT_A_TIME = threading.Lock()


def effect_picture(
    bins: Bins, curve: Curve, *, cutoff: float, width: int = 78, height: int = 16, plain: bool = False
) -> list[str]:
    """Binned means and the local fits, on the score's own scale.

    Parameters
    ----------
    bins, curve
        In score minus cutoff.
    cutoff
        Added to the scores on the axis.
    width, height
        Characters and lines.
    plain
        Use ASCII marks only.
    """
    # Imported here: the plotting library is needed only where a picture is asked for.
    import plotext

    below, above, line = ("o", "x", ".") if plain else ("○", "■", "braille")
    with _ONE_AT_A_TIME:
        plotext.clear_figure()
        plotext.theme("clear")
        plotext.plotsize(width, height)
        plotext.frame(False)
        plotext.xaxes(True, False)
        plotext.yaxes(True, False)
        for fit in (curve.below, curve.above):
            plotext.plot(list(fit.x + cutoff), list(fit.fit), marker=line)
        plotext.scatter(list(bins.below.centre + cutoff), list(bins.below.mean), marker=below)
        plotext.scatter(list(bins.above.centre + cutoff), list(bins.above.mean), marker=above)
        plotext.vline(cutoff)
        built = plotext.uncolorize(plotext.build())
        plotext.clear_figure()
    return [row.rstrip() for row in built.splitlines()]


def in_percent(bins: Bins, curve: Curve) -> tuple[Bins, Curve]:
    """The same picture with shares as percentages."""

    def fit(side: CurveSide) -> CurveSide:
        return replace(side, fit=100.0 * side.fit, low=100.0 * side.low, high=100.0 * side.high)

    return (
        Bins(
            below=replace(bins.below, mean=100.0 * bins.below.mean),
            above=replace(bins.above, mean=100.0 * bins.above.mean),
        ),
        Curve(below=fit(curve.below), above=fit(curve.above)),
    )


def table_lines(
    rows: Sequence[Sequence[str]], *, right: Sequence[int] = (), indent: int = 2, gap: int = 3
) -> list[str]:
    """Rows of text in aligned columns.

    Parameters
    ----------
    right
        Columns aligned on the right.
    """
    widths = [max(len(row[j]) for row in rows) for j in range(len(rows[0]))]
    lines = []
    for row in rows:
        cells = [
            cell.rjust(size) if j in right else cell.ljust(size)
            for j, (cell, size) in enumerate(zip(row, widths))
        ]
        lines.append((" " * indent + (" " * gap).join(cells)).rstrip())
    return lines
