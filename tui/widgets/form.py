"""A form of choices, one line each, walked with the arrows: left and right change a value, typing gives another."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import ClassVar

from rich.segment import Segment
from textual import events
from textual.binding import Binding, BindingType
from textual.message import Message

from study.literal import clean
from tui.look import Ink, Look, Paper
from tui.widgets.cells import cell_width, fit
from tui.widgets.cursor_view import CursorView

Value = str | float


@dataclass(frozen=True, slots=True, kw_only=True)
class Choice:
    """One line of a form.

    Parameters
    ----------
    key : str
        The name under which an edit is posted, e.g. ``estimate.kernel``.
    label : str
        What the line is about.
    value : str
        What holds now, as it is shown.
    allowed : tuple of str
        The words that left and right walk through; empty for a line that is only typed.
    typed : str
        What may be typed instead: "nothing", "number" or "text".
    help : str
        One sentence, shown beside the line while the cursor is on it.
    why_not : str
        When given, the line cannot be changed now and this says why; it is dimmed, not hidden.
    """

    key: str
    label: str
    value: str
    allowed: tuple[str, ...] = ()
    typed: str = "nothing"
    help: str = ""
    why_not: str = ""


class ChoiceForm(CursorView):
    """A form. Call `set_choices(...)` with what holds; it posts `ChoiceForm.ChoiceEdited(key, value)` and keeps no value of its own.

    The owner answers an edit by calling `set_choices` again, or `refuse(sentence)`.
    """

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("left,h", "cycle(-1)", "Previous value", show=False, id="form.previous"),
        Binding("right,l,space", "cycle(1)", "Next value", show=False, id="form.next"),
        Binding("escape", "give_up", "Stop typing", show=False, id="form.give_up"),
    ]

    class ChoiceEdited(Message):
        """A line was given another value: a word from its list or text as str, a typed number as float."""

        def __init__(self, form: ChoiceForm, key: str, value: Value) -> None:
            super().__init__()
            self.form = form
            self.key = key
            self.value = value

        @property
        def control(self) -> ChoiceForm:
            """The form that sent it, for `@on(..., "#id")`."""
            return self.form

    def __init__(self, *, id: str | None = None, classes: str | None = None) -> None:
        super().__init__(id=id, classes=classes)
        self._choices: tuple[Choice, ...] = ()
        self._typing: str | None = None
        self._refused = ""

    def set_choices(self, choices: Sequence[Choice]) -> None:
        """Show these lines; the cursor keeps its place, and lines that did not change are not repainted."""
        new = tuple(choices)
        before, self._choices = self._choices, new
        self._typing, self._refused = None, ""
        if [choice.key for choice in before] != [choice.key for choice in new]:
            self.set_row_count(len(new))
            return
        for row, (old, choice) in enumerate(zip(before, new, strict=True)):
            if old != choice or row == self.cursor:
                self.refresh_row(row)

    def refuse(self, sentence: str) -> None:
        """Say on the line under the cursor why the last edit was not accepted."""
        self._refused = sentence
        self.refresh_row(self.cursor)

    @property
    def typing(self) -> bool:
        """Whether a value is being typed, so that the screen leaves letters and digits alone."""
        return self._typing is not None

    # ---- keys -----------------------------------------------------------------------------------------------

    def action_cycle(self, steps: int) -> None:
        """Walk to the next allowed value; one that is not in the list leads to its beginning."""
        choice = self._here()
        if choice is None or choice.why_not or not choice.allowed:
            return
        allowed = choice.allowed
        where = allowed.index(choice.value) + steps if choice.value in allowed else (0 if steps > 0 else -1)
        self._edit(choice, allowed[where % len(allowed)])

    def action_choose(self) -> None:
        """Enter: take what was typed, begin typing, or walk on where nothing can be typed."""
        choice = self._here()
        if choice is None or choice.why_not:
            return
        if self._typing is not None:
            self._take_typed(choice)
        elif choice.typed != "nothing":
            self._type(choice.value if choice.typed == "text" else "")
        else:
            self.action_cycle(1)

    def action_give_up(self) -> None:
        """Stop typing, or let escape go on to the screen."""
        if self._typing is None:
            self.screen.post_message(ChoiceForm.Left(self))
        else:
            self._type(None)

    class Left(Message):
        """Escape was pressed while nothing was being typed."""

        def __init__(self, form: ChoiceForm) -> None:
            super().__init__()
            self.form = form

    async def _on_key(self, event: events.Key) -> None:
        choice = self._here()
        if choice is None or choice.why_not or choice.typed == "nothing":
            return
        if self._typing is not None and event.key == "backspace":
            self._type(self._typing[:-1])
        elif event.character is not None and event.is_printable and self._accepts(choice, event.character):
            self._type((self._typing or "") + event.character)
        else:
            return
        event.stop()
        event.prevent_default()

    def _accepts(self, choice: Choice, character: str) -> bool:
        if choice.typed == "number":
            # "e" continues a number (1e-3) but does not begin one: then it is the screen's key.
            return character in "0123456789.-+" or (self._typing is not None and character in "eE")
        return self._typing is not None

    def cursor_moved(self) -> None:
        """Leaving a line drops what was being typed there."""
        self._typing, self._refused = None, ""

    def _here(self) -> Choice | None:
        return self._choices[self.cursor] if self._choices else None

    def _type(self, text: str | None) -> None:
        self._typing, self._refused = text, ""
        self.refresh_row(self.cursor)

    def _take_typed(self, choice: Choice) -> None:
        text = (self._typing or "").strip()
        if choice.typed == "text" or text in choice.allowed:
            self._edit(choice, text)
            return
        try:
            number = float(text)
        except ValueError:
            number = math.nan
        if math.isfinite(number):
            self._edit(choice, number)
        else:
            words = f" or one of {', '.join(choice.allowed)}" if choice.allowed else ""
            self.refuse(f"“{clean(text)}” is not a number: type a number{words}")

    def _edit(self, choice: Choice, value: Value) -> None:
        self._typing, self._refused = None, ""
        self.refresh_row(self.cursor)
        if value != choice.value:
            self.post_message(self.ChoiceEdited(self, choice.key, value))

    # ---- drawing --------------------------------------------------------------------------------------------

    def draw_row(self, row: int, look: Look, width: int, paper: Paper) -> list[Segment]:
        """Draw a line: mark, label, value between marks that say it can be walked, help."""
        choice, here = self._choices[row], row == self.cursor
        labels = max(cell_width(clean(each.label)) for each in self._choices)
        values = min(24, max(cell_width(clean(each.value)) for each in self._choices))
        mark = (">" if look.ascii_only else "▸") if here else " "
        label = fit(clean(choice.label), labels, look)
        quiet = look.style(Ink.FAINT if choice.why_not else Ink.MUTED, paper)
        segments = [
            Segment(f"{mark} ", look.style(Ink.ACCENT, paper)),
            Segment(label + " " * (labels - cell_width(label) + 2), quiet),
            *self._draw_value(choice, here, values, look, paper),
        ]
        # One help line at a time: six sentences at once are read by nobody.
        said = choice.why_not or (choice.help if here else "")
        style = look.style(Ink.MUTED, paper)
        if here and self._refused:
            said, style = self._refused, look.style(Ink.WARNING, paper)
        used = sum(cell_width(segment.text) for segment in segments)
        segments.append(Segment(fit("  " + clean(said), max(0, width - used), look), style))
        return segments

    def _draw_value(self, choice: Choice, here: bool, cells: int, look: Look, paper: Paper) -> list[Segment]:
        if here and self._typing is not None:
            caret = "_" if look.ascii_only else "▏"
            words = fit(self._typing, cells - 1, look) + caret
            return [
                Segment("  ", look.style(Ink.TEXT, paper)),
                Segment(words + " " * (cells - cell_width(words) + 2), look.style(Ink.STRONG, paper)),
            ]
        words = fit(clean(choice.value), cells, look)
        walks = here and len(choice.allowed) > 1 and not choice.why_not
        before, after = ("<", ">") if look.ascii_only else ("‹", "›")
        ink = Ink.FAINT if choice.why_not else Ink.STRONG if here else Ink.TEXT
        arrows = look.style(Ink.ACCENT, paper)
        return [
            Segment(before + " " if walks else "  ", arrows),
            Segment(words, look.style(ink, paper)),
            Segment((" " + after if walks else "  ") + " " * (cells - cell_width(words)), arrows),
        ]
