"""Pages over the Effect screen: every choice in one form, the numbers behind the pictures, what was looked at."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from typing import TYPE_CHECKING, ClassVar, Final

from textual import on
from textual.binding import Binding, BindingType
from textual.widget import Widget

from estimation.line import Sweep
from study.document import Study
from study.options import BY_NAME, option_named
from study.wording import figure, percent, width_text
from tui.look import Ink
from tui.screens.effect_words import headline_lines
from tui.screens.effect_work import Found, Prepared
from tui.screens.lines import Lines, wrapped
from tui.screens.pages import Numbers, Page, TablePage
from tui.widgets.form import Choice, ChoiceForm, Value
from tui.widgets.table import Column

if TYPE_CHECKING:
    from tui.screens.effect_keys import EffectKeys

_LABELS: Final = {
    "estimate.bandwidth": "bandwidth",
    "estimate.pilot": "pilot bandwidth",
    "estimate.kernel": "kernel",
    "estimate.order": "order",
    "estimate.interval": "interval that leads",
    "estimate.level": "level",
    "estimate.variance": "variance",
    "estimate.curvature": "curvature bound",
    "estimate.donut": "donut",
    "estimate.adjust": "covariates",
}
_YES_NO: Final = {"on": True, "off": False}


class ChoicesPage(Page):
    """The form of every choice; the effect stands above it and follows each change."""

    AUTO_FOCUS = "ChoiceForm"
    DEFAULT_CSS = """
    ChoicesPage #effect { margin-bottom: 1; }
    ChoicesPage #explain { margin-bottom: 1; }
    """
    leave_keys = (("↑↓", "line"), ("←→", "change"), ("type", "a number"), ("u", "undo"), ("Esc", "back"))
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("u", "undo", show=False),
        Binding("f", "leave", show=False),
    ]

    def __init__(self, room: EffectKeys) -> None:
        super().__init__("Choices of the estimate")
        self._room = room

    def inside(self) -> Iterator[Widget]:
        """The effect, then the form."""
        yield Lines(id="effect")
        yield ChoiceForm(id="form")
        yield Lines(id="explain")

    def on_mount(self) -> None:
        """Fill the form, and follow the effect."""
        self._room.on_words = self.follow
        self.follow()
        self.explain()

    def on_unmount(self) -> None:
        """Stop following."""
        self._room.on_words = None

    def follow(self) -> None:
        """Show the effect and the choices as they are."""
        desk, standing = self.bench.desk, self._room.standing
        if desk is None or not self.query(ChoiceForm):
            return
        width = max(20, self.size.width - 2)
        if standing is not None:
            self.query_one("#effect", Lines).show(headline_lines(standing, width))
        why_not = desk.why_read_only
        self.query_one(ChoiceForm).set_choices(
            [_choice(desk.study, name, why_not) for name in _LABELS if name in BY_NAME]
        )

    @on(ChoiceForm.RowHighlighted)
    def explain(self) -> None:
        """Say below the form what the line under the cursor takes, whole."""
        names = [name for name in _LABELS if name in BY_NAME]
        option = BY_NAME[names[self.query_one(ChoiceForm).cursor]]
        width = max(20, self.size.width - 2)
        lines = [*wrapped(option.help, width), *wrapped(f"Takes {option.expected}.", width)]
        self.query_one("#explain", Lines).show([[(line, Ink.MUTED)] for line in lines])

    @on(ChoiceForm.ChoiceEdited)
    def _edited(self, event: ChoiceForm.ChoiceEdited) -> None:
        refusal = self.bench.try_change({event.key: _value_of(event.key, event.value)})
        self.follow()
        if refusal:
            event.form.refuse(refusal)

    @on(ChoiceForm.Left)
    def _left(self) -> None:
        self.dismiss()

    def action_undo(self) -> None:
        """Take the last change back, here too."""
        if self.bench.desk is not None and self.bench.desk.can_undo:
            self.bench.do_undo()
            self.follow()


def _choice(study: Study, name: str, why_not: str) -> Choice:
    option = option_named(name)
    value = study.value(name)
    allowed, typed = option.allowed, "nothing"
    if option.kind == "yes/no":
        allowed = tuple(_YES_NO)
        why_not = why_not or ("" if study.columns.covariates else "this study names no covariates")
    elif option.kind == "whole number":
        allowed = tuple(str(n) for n in range(int(option.least or 0), int(option.most or 0) + 1))
    elif "number" in option.kind:
        typed = "number"
    if name == "estimate.variance":
        allowed = tuple(word for word in allowed if word != "spatial" or study.assignment.rule == "boundary")
    return Choice(
        key=name,
        label=_LABELS[name],
        value=_shown(value),
        allowed=allowed,
        typed=typed,
        why_not=why_not,  # the help stands whole below the form
    )


def _shown(value: object) -> str:
    if isinstance(value, bool):
        return "on" if value else "off"
    if isinstance(value, tuple):
        return " and ".join(f"{side:g}" for side in value)
    return f"{value:g}" if isinstance(value, float) else str(value)


def _value_of(name: str, value: Value) -> object:
    kind = option_named(name).kind
    if kind == "yes/no":
        return _YES_NO.get(str(value), value)
    if kind == "whole number" and str(value).removeprefix("-").isdigit():
        return int(value)
    return value


def numbers_page(prepared: Prepared, reach: float, swept: Sweep | None) -> TablePage:
    """The numbers behind both pictures, the sweep's once it is there; Tab goes from one to the other."""
    tables = [_means(prepared, reach)]
    return TablePage(tables if swept is None else [*tables, _sweep(prepared, swept)])


def _means(prepared: Prepared, reach: float) -> Numbers:
    bins = prepared.workbench.bins(prepared.outcome, reach, 20, prepared.site)
    cutoff = prepared.effect.cutoff or 0.0
    scale = 100.0 if prepared.effect.binary else 1.0
    spread = scale * prepared.effect.reading.std_error
    half = 0.5 * reach / 20
    rows = []
    for name, side in (("below", bins.below), ("above", bins.above)):
        order = range(len(side.centre) - 1, -1, -1) if name == "below" else range(len(side.centre))
        rows += [
            (
                name,
                width_text(cutoff + float(side.centre[i]) - half),
                width_text(cutoff + float(side.centre[i]) + half),
                figure(scale * float(side.mean[i]), spread),
                f"{int(side.count[i]):,}",
            )
            for i in order
        ]
    columns = (
        Column(key="side", title="side"),
        Column(key="from", title="from", align="decimal"),
        Column(key="to", title="to", align="decimal"),
        Column(key="mean", title="mean", align="decimal"),
        Column(key="rows", title="rows", align="right"),
    )
    return Numbers(title=f"Means of {prepared.outcome} around the line", columns=columns, rows=rows)


def _sweep(prepared: Prepared, sweep: Sweep) -> Numbers:
    choices = prepared.workbench.study.estimate
    scale = 100.0 if prepared.effect.binary else 1.0
    rows = []
    for i in range(len(sweep.bandwidth)):
        spread = scale * float(sweep.std_error[i])
        rows.append(
            (
                width_text(float(sweep.bandwidth[i])),
                figure(scale * float(sweep.estimate[i]), spread, sign=True),
                figure(scale * float(sweep.low[i]), spread),
                figure(scale * float(sweep.high[i]), spread),
                f"{int(sweep.count_below[i]):,}",
                f"{int(sweep.count_above[i]):,}",
            )
        )
    columns = (
        Column(key="width", title="bandwidth", align="decimal"),
        Column(key="effect", title="effect", align="decimal"),
        Column(key="low", title="from", align="decimal"),
        Column(key="high", title="to", align="decimal"),
        Column(key="below", title="rows below", align="right"),
        Column(key="above", title="rows above", align="right"),
    )
    title = f"Effect on {prepared.outcome} by bandwidth, {percent(choices.level)} {choices.interval} interval"
    return Numbers(title=title, columns=columns, rows=rows)


def seen_page(seen: Sequence[Found], chosen: Callable[[Found], None]) -> TablePage:
    """What was looked at in this sitting, the latest first."""
    latest = list(reversed(seen))
    columns = (
        Column(key="outcome", title="outcome", widest=24),
        Column(key="width", title="bandwidth", align="decimal"),
        Column(key="how", title="choices", widest=34),
        Column(key="effect", title="effect", align="decimal"),
        Column(key="low", title="from", align="decimal"),
        Column(key="high", title="to", align="decimal"),
    )
    rows = [_seen_row(found) for found in latest]
    numbers = Numbers(title="Looked at in this sitting", columns=columns, rows=rows, empty="Nothing yet.")
    return TablePage([numbers], chosen=lambda row: chosen(latest[row]))


def _seen_row(found: Found) -> list[str | tuple[str, Ink]]:
    effect, choices = found.effect, found.effect.choices
    scale = 100.0 if effect.binary else 1.0
    spread = scale * effect.reading.std_error
    low, high = effect.leading
    how = f"{choices.kernel}, order {choices.order}, {choices.interval}"
    how += f", donut {choices.donut:g}" if choices.donut else ""
    how += ", covariates" if choices.adjust else ""
    return [
        found.outcome if found.site is None else f"{found.outcome} in {found.site}",
        width_text(max(effect.bandwidths.below, effect.bandwidths.above)),
        (how, Ink.MUTED),
        figure(scale * effect.reading.estimate, spread, sign=True),
        figure(scale * low, spread),
        figure(scale * high, spread),
    ]
