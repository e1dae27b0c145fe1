"""Figures as PNG, SVG and PDF: quiet, readable in grey, sides told apart by mark as well as by shade."""

from __future__ import annotations

import io
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from study.release.material import EffectPicture, Picture, ScorePicture, SitesPicture, SweepPicture

if TYPE_CHECKING:
    from matplotlib.axes import Axes

FORMATS: Final = ("png", "svg", "pdf")
_INK: Final = "#1c1c1c"
_LINE: Final = "#1f4e79"
_BAND: Final = "#c9d4df"
_MUTED: Final = "#767676"
_STYLE: Final[Any] = {  # the library types its settings key by key
    "font.family": "DejaVu Sans",
    "font.size": 9.0,
    "axes.titlesize": 10.0,
    "axes.titlelocation": "left",
    "axes.titlepad": 10.0,
    "axes.edgecolor": _MUTED,
    "axes.labelcolor": _INK,
    "axes.linewidth": 0.7,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.unicode_minus": True,
    "axes.formatter.useoffset": False,
    "text.parse_math": False,  # a column named $x$ is a name
    "xtick.color": _MUTED,
    "ytick.color": _MUTED,
    "xtick.labelcolor": _INK,
    "ytick.labelcolor": _INK,
    "text.color": _INK,
    "svg.fonttype": "path",  # the same letters where no such font is installed
    "svg.hashsalt": "cutbank",  # the same file from the same numbers
    "pdf.fonttype": 42,
}


def figure_files(picture: Picture) -> dict[str, bytes]:
    """The picture's file in each format, by its ending; the same bytes from the same numbers."""
    # Only a release draws: half a second and much memory that no other command pays.
    from matplotlib import rc_context
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    found: dict[str, bytes] = {}
    with rc_context(_STYLE):
        height = 3.6 if not isinstance(picture, SitesPicture) else max(1.6 + 0.28 * len(picture.names), 2.4)
        figure = Figure(figsize=(6.3, height), layout="constrained", facecolor="white")
        FigureCanvasAgg(figure)
        axes = figure.subplots()
        axes.set_title(picture.title)
        _draw(axes, picture)
        for kind in FORMATS:
            stream = io.BytesIO()
            metadata: dict[str, Any] = {
                "png": {"Software": None},
                "svg": {"Date": None, "Creator": None},
                "pdf": {"CreationDate": None, "Creator": None, "Producer": None},
            }[kind]
            figure.savefig(stream, format=kind, dpi=200, metadata=metadata)
            found[kind] = stream.getvalue()
    return found


def _draw(axes: Axes, picture: Picture) -> None:
    match picture:
        case EffectPicture():
            _effect(axes, picture)
        case SweepPicture():
            _sweep(axes, picture)
        case SitesPicture():
            _sites(axes, picture)
        case ScorePicture():
            _score(axes, picture)


def _effect(axes: Axes, picture: EffectPicture) -> None:
    cutoff = picture.cutoff
    for side in (picture.curve.below, picture.curve.above):
        axes.fill_between(side.x + cutoff, side.low, side.high, color=_BAND, linewidth=0)
        # A straight fit is drawn from its ends: its rounded points would make it a flight of steps.
        straight = np.linspace(side.fit[0], side.fit[-1], len(side.fit))
        bend = float(np.max(np.abs(side.fit - straight)))
        flat = bend <= 0.02 * float(np.max(side.high - side.low))
        axes.plot(side.x + cutoff, straight if flat else side.fit, color=_LINE, linewidth=1.6)
    axes.plot(
        cutoff - picture.below.centre, picture.below.mean, "o", color=_INK, markerfacecolor="white",
        markersize=5, label="mean of a bin below",
    )  # fmt: skip
    axes.plot(
        cutoff + picture.above.centre, picture.above.mean, "s", color=_INK, markersize=4.5,
        label="mean of a bin above",
    )  # fmt: skip
    axes.axvline(cutoff, color=_INK, linewidth=0.8, linestyle=(0, (4, 3)))
    axes.set_xlabel(picture.across)
    axes.set_ylabel(picture.up)
    axes.legend(
        frameon=False, fontsize=8, ncols=2, loc="upper right", bbox_to_anchor=(1.0, 1.14), borderaxespad=0
    )


def _sweep(axes: Axes, picture: SweepPicture) -> None:
    axes.fill_between(picture.width, picture.low, picture.high, color=_BAND, linewidth=0)
    axes.plot(picture.width, picture.estimate, color=_LINE, linewidth=1.6, marker="o", markersize=3)
    axes.axhline(0.0, color=_MUTED, linewidth=0.7)
    axes.axvline(picture.chosen, color=_INK, linewidth=0.8, linestyle=(0, (4, 3)))
    axes.annotate(
        "reported", (picture.chosen, 1.0), xycoords=("data", "axes fraction"), xytext=(4, -9),
        textcoords="offset points", fontsize=8,
    )  # fmt: skip
    axes.set_xlabel(picture.across)
    axes.set_ylabel(picture.up)


def _sites(axes: Axes, picture: SitesPicture) -> None:
    rows = [*zip(picture.names, picture.numbers)]
    for place, (_, (estimate, low, high)) in enumerate(rows):
        axes.plot((low, high), (place, place), color=_MUTED, linewidth=1.2)
        axes.plot(estimate, place, "o", color=_INK, markersize=5)
    names = [name for name, _ in rows]
    if picture.pooled is not None:
        estimate, low, high = picture.pooled
        place = len(rows)
        axes.plot((low, high), (place, place), color=_LINE, linewidth=2.0)
        axes.plot(estimate, place, "D", color=_LINE, markersize=6)
        names.append("pooled")
    axes.axvline(0.0, color=_MUTED, linewidth=0.7)
    axes.set_yticks(range(len(names)), _short(names))
    axes.set_ylim(len(names) - 0.5, -0.5)
    axes.tick_params(axis="y", length=0)
    axes.spines["left"].set_visible(False)
    axes.set_xlabel(picture.across)


def _score(axes: Axes, picture: ScorePicture) -> None:
    for low, high, rows in picture.bars:
        below = high <= 0.0
        axes.bar(
            low + picture.cutoff, rows, width=high - low, align="edge", linewidth=0.6, edgecolor="white",
            color=_BAND if below else _MUTED,
        )  # fmt: skip
    if picture.hidden:
        middles = [0.5 * (low + high) + picture.cutoff for low, high in picture.hidden]
        axes.plot(
            middles, [0.025] * len(middles), "x", color=_MUTED, markersize=4, label="not shown",
            transform=axes.get_xaxis_transform(),
        )  # fmt: skip
        axes.legend(frameon=False, fontsize=8, loc="upper right")
    axes.axvline(picture.cutoff, color=_INK, linewidth=0.8, linestyle=(0, (4, 3)))
    axes.set_xlabel(picture.across)
    axes.set_ylabel("rows")
    axes.set_ylim(bottom=0.0)


def _short(names: Sequence[str]) -> list[str]:
    return [name if len(name) <= 28 else name[:27] + "…" for name in names]
