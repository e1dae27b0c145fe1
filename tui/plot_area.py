"""A part of a canvas with two scales: where numbers become places, and axes with round numbers come from."""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from tui.canvas import Canvas
from tui.look import Ink, Paper

Vector = npt.NDArray[np.float64]
Cells = npt.NDArray[np.intp]


@dataclass(frozen=True, slots=True, kw_only=True)
class Scale:
    """An interval of numbers laid along cells.

    Parameters
    ----------
    low, high : float
        Ends of the interval, low < high; both positive when `log`.
    log : bool
        Equal ratios take equal lengths.
    step : float, optional
        Distance of the ticks, when the scale was made for it.
    """

    low: float
    high: float
    log: bool = False
    step: float | None = None

    def share(self, values: npt.ArrayLike) -> Vector:
        """Return how far along each value lies: 0 at `low`, 1 at `high`, NaN where it cannot be placed."""
        numbers = np.asarray(values, dtype=np.float64)
        if not self.log:
            return (numbers - self.low) / (self.high - self.low)
        logs = np.log(np.where(numbers > 0, numbers, np.nan))
        return np.asarray((logs - math.log(self.low)) / (math.log(self.high) - math.log(self.low)))

    def value(self, share: float) -> float:
        """Return the value at a share of the length."""
        if not self.log:
            return self.low + share * (self.high - self.low)
        return float(self.low * (self.high / self.low) ** share)

    def ticks(self, most: int) -> list[float]:
        """Return at most about `most` round values inside the interval, ascending."""
        if self.step is not None:
            return _multiples(self.step, self.low, self.high)
        if self.log:
            found = _log_ticks(self.low, self.high, most)
            if len(found) >= min(3, most):
                return found
        return nice_ticks(self.low, self.high, most)


def nice_step(rough: float) -> float:
    """Return the smallest of 1, 2 or 5 times a power of ten that is not below `rough` (> 0)."""
    power = 10.0 ** math.floor(math.log10(rough))
    for factor in (1.0, 2.0, 5.0):
        if factor * power >= rough * (1 - 1e-9):
            return factor * power
    return 10.0 * power


def nice_ticks(low: float, high: float, most: int) -> list[float]:
    """Return the multiples of a nice step in [low, high], at most `most` of them (always at least the room for one)."""
    if not (math.isfinite(low) and math.isfinite(high)) or high <= low:
        return []
    step = nice_step((high - low) / max(1, most))
    if not math.isfinite(step) or step <= 0:
        return []
    return _multiples(step, low, high)


def _multiples(step: float, low: float, high: float) -> list[float]:
    first, last = math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9)
    # Multiples of the step, not sums of it: 3 * 0.1 stays next to 0.3 however far out it lies.
    return [index * step for index in range(first, last + 1)]


def _log_ticks(low: float, high: float, most: int) -> list[float]:
    for factors in ((1.0, 2.0, 5.0), (1.0, 3.0), (1.0,)):
        powers = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
        ticks = [factor * 10.0**power for power in powers for factor in factors]
        ticks = [tick for tick in ticks if low * (1 - 1e-9) <= tick <= high * (1 + 1e-9)]
        if len(ticks) <= most:
            return ticks
    return []


def tick_labels(ticks: Sequence[float]) -> list[str]:
    """Return the ticks as text with the same number of decimals each, as few as tell them apart.

    Very large and very small numbers are written with a power of ten.
    """
    if not ticks:
        return []
    largest = max(abs(tick) for tick in ticks)
    gaps = [after - before for before, after in itertools.pairwise(ticks)]
    finest = min(gaps) if gaps else (largest or 1.0)
    if largest >= 1e7 or (largest > 0 and finest < 1e-5):
        return [with_minus(f"{tick:.4g}") for tick in ticks]
    decimals = max(0, -math.floor(math.log10(finest) + 1e-9)) if finest > 0 else 0
    return [with_minus(f"{tick + 0.0:,.{decimals}f}") for tick in ticks]


def with_minus(number: str) -> str:
    """Return a number as text with the minus sign that sentences use; an ASCII canvas turns it back.

    What has been rounded to zero has no sign.
    """
    if not number.strip("-0.,"):
        return number.removeprefix("-")
    return "−" + number[1:] if number.startswith("-") else number


def even_scale(low: float, high: float, rows: int, *, from_zero: bool = False) -> Scale:
    """Return a scale for so many rows on which round ticks stand equally many rows apart.

    Parameters
    ----------
    low, high : float
        What must be inside.
    rows : int
        Rows of the area.
    from_zero : bool
        The scale begins exactly at 0 (for counts); else a tick lies in the middle of its row.

    Notes
    -----
    A row is worth a round step divided by a whole number of rows, the smallest such worth that holds the interval with half a row to
    spare at both ends. So labels have one rhythm and say exactly where they point.
    """
    low, high = (0.0, high if high > 0 else 1.0) if from_zero else padded(low, high, 0.0)
    span = high - low
    usable = max(1, rows) if from_zero else max(1, rows - 1)
    closest = max(2, round(rows / 7))
    worth, step = math.inf, 1.0
    for between in range(closest, closest + 4):
        tick = nice_step(between * span / usable)
        if tick / between < worth:
            worth, step = tick / between, tick
    if from_zero:
        return Scale(low=0.0, high=rows * worth, step=step)
    bottom = (math.floor((low + high - rows * worth) / 2 / worth + 0.5) + 0.5) * worth
    if bottom > low:
        bottom -= worth
    elif bottom + rows * worth < high:
        bottom += worth
    return Scale(low=bottom, high=bottom + rows * worth, step=step)


def padded(low: float, high: float, share: float = 0.06) -> tuple[float, float]:
    """Return the interval with some air at both ends; an empty one becomes one unit wide or a tenth of its value."""
    if high > low:
        return low - share * (high - low), high + share * (high - low)
    half = 0.05 * abs(low) or 0.5
    return low - half, high + half


class PlotArea:
    """A block of `width` x `height` cells of a canvas with an x and a y scale."""

    def __init__(
        self, canvas: Canvas, *, left: int, top: int, width: int, height: int, x: Scale, y: Scale
    ) -> None:
        self.canvas = canvas
        self.left, self.top, self.width, self.height = left, top, width, height
        self.x, self.y = x, y

    def on(self, canvas: Canvas) -> PlotArea:
        """Return the same area on another canvas."""
        return PlotArea(
            canvas, left=self.left, top=self.top, width=self.width, height=self.height, x=self.x, y=self.y
        )

    # ---- places ---------------------------------------------------------------------------------------------

    def columns(self, values: npt.ArrayLike) -> Cells:
        """Return the canvas column of each value; -1 where it lies outside the area."""
        return self._cells(self.x.share(values), self.width, self.left)

    def rows(self, values: npt.ArrayLike) -> Cells:
        """Return the canvas row of each value; -1 where it lies outside the area."""
        return self._cells(1.0 - self.y.share(values), self.height, self.top)

    def _cells(self, share: Vector, cells: int, offset: int) -> Cells:
        inside = (share >= -1e-9) & (share <= 1 + 1e-9)
        place = np.where(inside, share, 0.0) * cells
        return np.where(inside, np.clip(place.astype(np.intp), 0, cells - 1) + offset, -1)

    # ---- drawing --------------------------------------------------------------------------------------------

    def curve(self, x: npt.ArrayLike, y: npt.ArrayLike, ink: Ink, *, dashed: bool = False) -> None:
        """Draw a function of x through points of ascending x, in dots.

        Points that are not finite are left out; fewer than two draw nothing.
        """
        column, height = self._dot_heights(x, y)
        if column.size == 0:
            return
        # Each dot column reaches half-way to its neighbours, so that a steep curve has no holes.
        halfway = (height[1:] + height[:-1]) / 2
        before, after = np.append(height[:1], halfway), np.append(halfway, height[-1:])
        top = np.rint(np.minimum(np.minimum(before, after), height))
        bottom = np.rint(np.maximum(np.maximum(before, after), height))
        mask = np.zeros((4 * self.height, 2 * self.width), dtype=np.bool_)
        row = np.arange(4 * self.height)[:, None]
        mask[:, column] = (row >= top) & (row <= bottom)
        if dashed:
            # Fixed to the grid, so that a dash stays where it is while the curve moves.
            mask[:, np.arange(2 * self.width) % 4 >= 2] = False
        self.canvas.dots(mask, ink, x=self.left, y=self.top)

    def band(self, x: npt.ArrayLike, low: npt.ArrayLike, high: npt.ArrayLike) -> None:
        """Draw a band: a tint where the look has one, and dashed edges."""
        low, high = np.asarray(low, dtype=np.float64), np.asarray(high, dtype=np.float64)
        column, bottom = self._dot_heights(x, low)
        also, top = self._dot_heights(x, high)
        if column.size and np.array_equal(column, also):
            first = column % 2 == 0  # one dot column a cell decides about its tint
            # A third of a cell is enough: with half of it, a thin slanted band would be a row of loose blocks.
            above = 4 * np.arange(self.height)[:, None] - 0.5
            covered = np.minimum(bottom[first], above + 4) - np.maximum(top[first], above)
            mask = np.zeros((self.height, self.width), dtype=np.bool_)
            mask[:, column[first] // 2] = covered >= 4 / 3
            self.canvas.tint(mask, Paper.BAND, x=self.left, y=self.top)
        self.curve(x, low, Ink.EDGE, dashed=True)
        self.curve(x, high, Ink.EDGE, dashed=True)

    def _dot_heights(self, x: npt.ArrayLike, y: npt.ArrayLike) -> tuple[Cells, Vector]:
        """Return the dot columns a curve covers and its height in dots (0 = top) at each."""
        across = self.x.share(x) * 2 * self.width - 0.5
        down = (1.0 - self.y.share(y)) * 4 * self.height - 0.5
        known = np.isfinite(across) & np.isfinite(down)
        across, down = across[known], down[known]
        if across.size < 2:
            return np.empty(0, dtype=np.intp), np.empty(0)
        # Rounded to the nearest dots, halves inwards.
        first = max(0, math.ceil(across[0] - 0.5 + 1e-9))
        last = min(2 * self.width - 1, math.floor(across[-1] + 0.5 - 1e-9))
        column = np.arange(first, last + 1, dtype=np.intp)
        # Clipped so that a curve far outside does not overflow when it is rounded.
        far = 4.0 * self.height
        return column, np.clip(np.interp(column, across, down), -far, 2 * far)

    def points(self, x: npt.ArrayLike, y: npt.ArrayLike, mark: str, ink: Ink | npt.NDArray[np.uint8]) -> None:
        """Draw a mark at each point inside the area."""
        column, row = self.columns(x), self.rows(y)
        column = np.where(row < 0, -1, column)
        self.canvas.marks(column, row, mark, ink)

    def vertical_rule(self, x: float, mark: str = "┊", ink: Ink = Ink.MUTED) -> None:
        """Draw a dashed rule at x where nothing else is."""
        column = int(self.columns([x])[0])
        if column >= 0:
            self.canvas.vertical(column, range(self.top, self.top + self.height), mark, ink)

    def horizontal_rule(self, y: float, mark: str = "╌", ink: Ink = Ink.FAINT) -> None:
        """Draw a dashed rule at y where nothing else is, nor right beside: between the dashes of an edge it would be noise."""
        row = int(self.rows([y])[0])
        if row < 0:
            return
        drawn = self.canvas.drawn(row)[self.left : self.left + self.width]
        near = drawn.copy()
        near[1:] |= drawn[:-1]
        near[:-1] |= drawn[1:]
        self.canvas.horizontal(row, np.flatnonzero(~near) + self.left, mark, ink)

    # ---- axes -----------------------------------------------------------------------------------------------

    def y_labels(self, ink: Ink = Ink.MUTED) -> None:
        """Write the ticks of y flush right against the area, so that their points stand under each other."""
        ticks = self.y.ticks(y_tick_count(self.height))
        # A tick on the wall between two rows labels the upper one, zero at the bottom like all others.
        rows = self.rows(np.asarray(ticks) + 1e-6 * (self.y.high - self.y.low))
        for row, words in zip(rows.tolist(), tick_labels(ticks), strict=True):
            if row >= 0:
                self.canvas.text(self.left - 1 - len(words), row, words, ink)

    def x_axis(
        self, *, heavy: tuple[float, float] | None = None, labels_shift: float = 0.0, name: str = ""
    ) -> None:
        """Draw the line under the area with its ticks, the labels under it, and the axis's name at the right end.

        Parameters
        ----------
        heavy : (float, float), optional
            The stretch drawn as a heavy line: the window that counts.
        labels_shift : float
            Added to a tick's place to give the number it is labelled with.
        name : str
            What the numbers are; labels that would touch it are left out.
        """
        row = self.top + self.height
        if len(name) > self.width // 3:
            name = name[: self.width // 3] + "…"
        places, words = self._x_ticks(labels_shift)
        columns = self.columns(places).tolist()
        self.canvas.horizontal(
            row, range(self.left, self.left + self.width), "─", Ink.FAINT, only_blank=False
        )
        self.canvas.marks(np.array(columns, dtype=np.intp), np.full(len(columns), row), "┬", Ink.FAINT)
        if heavy is not None:
            self._heavy(row, heavy, columns)
        self._x_labels(row + 1, columns, words, name)

    def _x_ticks(self, shift: float) -> tuple[list[float], list[str]]:
        shown = Scale(low=self.x.low + shift, high=self.x.high + shift, log=self.x.log)
        most = max(2, self.width // 9)
        ticks = shown.ticks(most)
        return [tick - shift for tick in ticks], tick_labels(ticks)

    def _heavy(self, row: int, ends: tuple[float, float], ticks: list[int]) -> None:
        low, high = max(ends[0], self.x.low), min(ends[1], self.x.high)
        first, last = (int(column) for column in self.columns([low, high]))
        if first < 0 or last < 0:
            return
        columns = np.arange(first, last + 1)
        self.canvas.marks(columns, np.full(columns.shape, row), "━", Ink.ACCENT)
        inner = np.array([tick for tick in ticks if first <= tick <= last], dtype=np.intp)
        self.canvas.marks(inner, np.full(inner.shape, row), "┯", Ink.ACCENT)
        if ends[0] >= self.x.low:
            self.canvas.text(first, row, "┝", Ink.ACCENT)
        if ends[1] <= self.x.high:
            self.canvas.text(last, row, "┥", Ink.ACCENT)

    def _x_labels(self, row: int, columns: list[int], words: list[str], name: str) -> None:
        end = self.left + self.width
        free_until = end - len(name) - 2 if name else self.canvas.width
        taken = -1
        for column, label in zip(columns, words, strict=True):
            start = min(max(0, column - (len(label) - 1) // 2), self.canvas.width - len(label))
            if column < 0 or start <= taken or start + len(label) > free_until:
                continue
            taken = self.canvas.text(start, row, label, Ink.MUTED)
        if name:
            self.canvas.text(max(0, end - len(name)), row, name, Ink.MUTED)


def y_tick_count(height: int) -> int:
    """Return how many ticks a y axis of so many rows bears."""
    return max(2, min(8, height // 3))


def gutter(y: Scale, height: int) -> int:
    """Return the columns left of an area that its y labels take, the blank between them included."""
    return max((len(words) for words in tick_labels(y.ticks(y_tick_count(height)))), default=0) + 1
