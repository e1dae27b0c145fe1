"""What the six screens share: the header, the line of keys, a question at the bottom, and how a key becomes an action."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from typing import TYPE_CHECKING, Any, ClassVar, cast

from textual import events, on
from textual.app import ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import Vertical
from textual.screen import Screen
from textual.widget import Widget
from textual.widgets import Input

from study.literal import clean
from tui.keys import BY_NAME, Key, Place, key_named, keys_of
from tui.look import Ink
from tui.safe import Entry
from tui.screens.header import header
from tui.screens.lines import Line, Lines, Part, wrapped
from tui.slot import Slot
from tui.walk import HINTS
from tui.widgets.cells import cell_width

if TYPE_CHECKING:
    from tui.app import CutbankApp


class Room(Screen[None]):
    """One of the six screens. Subclasses give the body and a method `do_ACTION` for each of their keys."""

    place: ClassVar[str]
    AUTO_FOCUS = ""
    DEFAULT_CSS = """
    Room { layers: base above; background: $background; }
    Room > #top { height: auto; padding: 0 1; }
    Room > #body { height: 1fr; padding: 0 1; }
    Room > #foot { dock: bottom; layer: above; height: auto; padding: 0 1; background: $background; }
    Room > #room-for-foot { height: 1; }
    """

    def compose(self) -> ComposeResult:
        """Header, body, the line of keys."""
        yield Lines(id="top")
        with Vertical(id="body"):
            yield from self.body()
        yield Lines(id="room-for-foot")  # blank: a bare widget would show its own name
        yield Foot(id="foot")

    def body(self) -> Iterator[Widget]:
        """The widgets between header and keys."""
        raise NotImplementedError

    # ---- what the subclass tells ------------------------------------------------------------------------------

    def why_not(self, action: str) -> str:
        """Why an action of this screen can't run now, as a sentence without a full stop; "" when it can."""
        return ""

    def refresh_view(self) -> None:
        """Bring the body to what is on the desk."""

    def text(self) -> list[str]:
        """The screen's content as plain lines."""
        return []

    def copied(self) -> list[str]:
        """What `y` copies; the whole text unless a screen has something shorter to say."""
        return self.text()

    def slots(self) -> Sequence[Slot[Any, Any]]:
        """The slow work that the screen may have asked for."""
        return ()

    # ---- shared -----------------------------------------------------------------------------------------------

    @property
    def bench(self) -> CutbankApp:
        """The app, with its desk and its workbench."""
        return cast("CutbankApp", self.app)

    @property
    def about(self) -> Place:
        """This screen in the table of keys."""
        return BY_NAME[self.place]

    def on_mount(self) -> None:
        """Write the header and the body for the first time."""
        self.refresh_all()

    def on_screen_resume(self) -> None:
        """The person has come to this screen: it may be older than the study."""
        self.refresh_all()

    def on_resize(self, event: events.Resize) -> None:
        """Lay out anew for another size."""
        self.call_after_refresh(self.refresh_all)

    def refresh_all(self) -> None:
        """Bring header, body and keys up to date."""
        if not self.query(Foot) or not self.query("#body > *"):
            return  # asked before the screen was composed: its mounting comes back here
        self.refresh_top()
        self.refresh_view()
        self.refresh_keys()

    def refresh_top(self) -> None:
        """Bring the header up to date."""
        self.query_one("#top", Lines).show(header(self.bench, self.place, self.size.width, self.size.height))

    def refresh_keys(self) -> None:
        """Bring the line of keys up to date."""
        self.query_one(Foot).show_keys(self)

    def why_not_key(self, key: Key) -> str:
        """Why a key can't do its work now; "" when it can."""
        desk = self.bench.desk
        if key.edits and desk is None:
            return "No study is open: f on the Data screen opens one"
        if desk is not None:
            if key.edits and desk.why_read_only:
                return desk.why_read_only
            if key.id == "everywhere.undo" and not desk.can_undo:
                return "Nothing was changed yet"
            if key.id == "everywhere.redo" and not desk.can_redo:
                return "Nothing was taken back"
        return "" if key.id.startswith("everywhere.") else self.why_not(key.action)

    def action_key(self, id: str) -> None:
        """Do what a key is for, or say why it can't be done now."""
        if self.asking:
            return  # a key that the field has no use for
        key = key_named(id)
        self.query_one(Foot).hush()
        reason = self.why_not_key(key)
        if reason:
            self.tell(reason + ".")
            return
        holder = self.bench if id.startswith("everywhere.") else self
        getattr(holder, f"do_{key.action}")()

    def tell(self, words: str, *, warning: bool = False) -> None:
        """Say something in the place of the keys, until the next key."""
        self.query_one(Foot).tell(words, warning)

    def hush(self) -> None:
        """Show the keys again where something was said."""
        self.query_one(Foot).hush()

    def change(self, changes: dict[str, object]) -> bool:
        """Change the study; what it refuses is told."""
        return self.bench.change(changes)

    def ask(
        self,
        question: str,
        value: str,
        take: Callable[[str], str],
        *,
        hint: str = "",
        typed: Callable[[str], None] | None = None,
    ) -> None:
        """Ask for a line of text at the bottom.

        Parameters
        ----------
        question, hint
            What is asked, and what may be typed.
        value
            What stands there at first.
        take
            Called with the text on Enter; returns why it is refused, or "".
        typed
            Called with the text after each key.
        """
        self.query_one(Foot).ask(question, value, take, hint=hint, typed=typed)

    @property
    def asking(self) -> bool:
        """Whether a question stands at the bottom."""
        return self.query_one(Foot).asking


class Foot(Vertical):
    """The bottom of a screen: its keys, or a sentence until the next key, or a question."""

    DEFAULT_CSS = """
    Foot > Entry { display: none; padding: 0; background: transparent; }
    Foot.asking > Entry { display: block; }
    """

    BINDINGS: ClassVar[list[BindingType]] = [Binding("escape", "close", show=False)]

    def __init__(self, *, id: str | None = None) -> None:
        super().__init__(id=id)
        self._room: Room | None = None
        self._take: Callable[[str], str] | None = None
        self._typed: Callable[[str], None] | None = None
        self._hint = ""
        self._question = ""
        self._focus_before: Widget | None = None
        self._told = False
        self._words = ("", False)

    def compose(self) -> ComposeResult:
        """Words above, the field below them, a hint under it."""
        yield Lines(id="said")
        yield Entry(id="entry", select_on_focus=False, compact=True)
        yield Lines(id="hint")

    @property
    def asking(self) -> bool:
        """Whether a question stands here."""
        return self._take is not None

    def show_keys(self, room: Room) -> None:
        """Show the keys of a room, unless something else is being said."""
        self._room = room
        if self._told:
            self.tell(*self._words)  # wrapped anew: the terminal may have another width
        elif not self.asking:
            lines = [*hint_lines(room, self._width()), keys_line(room, self._width())]
            self.query_one("#said", Lines).show(lines)
            # What is said for a moment lies over the body; a hint stays, so the body makes room for it.
            below = room.query_one("#room-for-foot")
            if below.size.height != len(lines):
                below.styles.height = len(lines)

    def tell(self, words: str, warning: bool = False) -> None:
        """Say something until the next key."""
        if self.asking:
            self.say_hint(words, warning=warning)
            return
        self._told, self._words = True, (words, warning)
        ink = Ink.WARNING if warning else Ink.STRONG
        self.query_one("#said", Lines).show(
            [[(line, ink)] for line in wrapped(words.replace("\n", " "), self._width())]
        )

    def hush(self) -> None:
        """Show the keys again after something was said."""
        if self._told:
            self._told = False
            if self._room is not None:
                self.show_keys(self._room)

    def ask(
        self,
        question: str,
        value: str,
        take: Callable[[str], str],
        *,
        hint: str,
        typed: Callable[[str], None] | None,
    ) -> None:
        """Put a question with a field under it."""
        self._take, self._typed, self._hint, self._question = take, typed, hint, question
        self._told = False
        self._focus_before = self.screen.focused
        self.query_one("#said", Lines).show([[(question, Ink.STRONG)]])
        self.say_hint(hint)
        self.add_class("asking")
        entry = self.query_one(Entry)
        entry.value = value
        entry.cursor_position = len(value)
        entry.focus()
        entry.select_all()  # what is typed replaces what stands there; an arrow keeps it

    def say_hint(self, words: str, *, warning: bool = False) -> None:
        """Say something under the field."""
        ink = Ink.WARNING if warning else Ink.MUTED
        lines: list[Line] = [[(line, ink)] for line in wrapped(words, self._width())] if words else []
        self.query_one("#hint", Lines).show(lines)

    @on(Input.Submitted)
    def _submitted(self, event: Input.Submitted) -> None:
        event.stop()
        if self._take is None:
            return
        refusal = self._take(event.value.strip())
        if refusal:
            self.say_hint(refusal, warning=True)
        else:
            self.close()

    @on(Input.Changed)
    def _changed(self, event: Input.Changed) -> None:
        event.stop()
        if self._take is not None and self._typed is not None:
            self._typed(event.value.strip())

    def action_close(self) -> None:
        """Escape leaves the question."""
        self.close()

    def close(self) -> None:
        """Take the question away."""
        self._take = self._typed = None
        self.remove_class("asking")
        self.say_hint("")
        self.screen.set_focus(self._focus_before)
        if self._room is not None and not self._told:
            self.show_keys(self._room)

    def _width(self) -> int:
        return max(20, self.screen.size.width - 2)


def hint_lines(room: Room, width: int) -> list[Line]:
    """The hint for a first run that is due, and the keys that move on; [] for none."""
    hint = room.bench.hint
    if hint is None:
        return []
    first = f"Hint {hint + 1} of {len(HINTS)}"
    lines = [[(line, Ink.STRONG)] for line in wrapped(HINTS[hint], width)]
    keys: Line = [
        (f"{first}  ", Ink.MUTED),
        ("F4", Ink.ACCENT),
        (" next  ", Ink.MUTED),
        ("F6", Ink.ACCENT),
        (" no more hints", Ink.MUTED),
    ]
    return [*lines, keys]


def keys_line(room: Room, width: int) -> Line:
    """The keys of a room in one line: its own from the left as far as there is room, help at the right."""
    keys = [key for key in keys_of(room.place) if key.footer and key.id != "everywhere.help"]
    parts: list[Part] = []
    used = cell_width("? help") + 2
    for key in keys:
        wide = cell_width(f"{key.in_footer} {key.label}") + 2
        if used + wide > width:
            break
        off = bool(room.why_not_key(key))
        parts += [
            (key.in_footer, Ink.FAINT if off else Ink.ACCENT),
            (f" {key.label}  ", Ink.FAINT if off else Ink.MUTED),
        ]
        used += wide
    return parts, [("?", Ink.ACCENT), (" help", Ink.MUTED)]


def number(text: str) -> float | None:
    """A typed number, a comma taken for a point and the printed minus for a hyphen; None for anything else."""
    import math

    try:
        value = float(clean(text).strip().replace("−", "-").replace(",", "."))
    except ValueError:
        return None
    return value if math.isfinite(value) else None
