"""Every key of the program in one table: the footer, the help, the finder and the README read it.

Plain letters, digits, F-keys, arrows, Enter, Escape and Tab only: terminals and multiplexers eat the rest.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Final

from textual.binding import Binding


@dataclass(frozen=True, slots=True, kw_only=True)
class Key:
    """One key of one screen.

    Attributes
    ----------
    id
        Screen and action, such as "effect.wider"; the screen's method is named after what follows the point.
    keys
        The names by which the toolkit knows the key or keys.
    shown
        What is printed on the keyboard.
    pair
        In the footer, instead of `shown`: this key and its opposite; "" for a key that stands alone.
    label
        One or two words for the footer.
    help
        One sentence for the help, the finder and the README.
    footer
        Whether the footer has room for it; everything is in the help.
    edits
        Whether it changes the study, so that a second person who opened the same study can't.
    """

    id: str
    keys: tuple[str, ...]
    shown: str
    label: str
    help: str
    pair: str = ""
    footer: bool = True
    edits: bool = False

    @property
    def in_footer(self) -> str:
        """What the footer prints for it."""
        return self.pair or self.shown

    @property
    def action(self) -> str:
        """The part of the id after the point."""
        return self.id.partition(".")[2]


@dataclass(frozen=True, slots=True, kw_only=True)
class Concept:
    """A word of the trade or ours, explained in a sentence or two in a screen's help."""

    word: str
    said: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Place:
    """One screen: its number, its name, its keys and the words to know there.

    `awaits` is empty for a screen that works, else one sentence on what it will hold.
    """

    name: str
    digit: str
    title: str
    about: str
    keys: tuple[Key, ...] = ()
    concepts: tuple[Concept, ...] = ()
    awaits: str = ""


def _key(
    id: str,
    keys: str,
    shown: str,
    label: str,
    sentence: str,
    *,
    pair: str = "",
    footer: bool = True,
    edits: bool = False,
) -> Key:
    names = tuple(keys.split(","))
    return Key(
        id=id, keys=names, shown=shown, label=label, help=sentence, pair=pair, footer=footer, edits=edits
    )


EVERYWHERE: Final[tuple[Key, ...]] = (
    _key("everywhere.help", "question_mark,f1", "?", "help", "The keys of this screen, and its words explained."),
    _key("everywhere.undo", "u", "u", "undo", "Take back the last change of the study.", edits=True),
    _key("everywhere.redo", "U", "U", "redo", "Make the change again that was taken back.", footer=False, edits=True),
    _key("everywhere.copy", "y", "y", "copy", "Copy what this screen says to a file and to the terminal's clipboard.", footer=False),
    _key("everywhere.picture", "f9", "F9", "picture", "Keep this screen as a picture (SVG) in a file.", footer=False),
    _key("everywhere.text", "v", "v", "as text", "This screen as plain text, for a screen reader or for selecting.", footer=False),
    _key("everywhere.find", "f2", "F2", "find", "Find any action by name.", footer=False),
    _key("everywhere.looks", "f3", "F3", "colours", "Change between dark, light and the terminal's own colours.", footer=False),
    _key("everywhere.next_hint", "f4", "F4", "next hint", "The next of the five hints for a first run.", footer=False),
    _key("everywhere.end_hints", "f6", "F6", "no more hints", "Take the hints away for good.", footer=False),
    _key("everywhere.redraw", "f5", "F5", "redraw", "Draw the whole screen again, after something else wrote on it.", footer=False),
    _key("everywhere.quit", "q", "q", "quit", "Leave; everything is saved already.", footer=True),
)  # fmt: skip

_DATA: Final[tuple[Key, ...]] = (
    _key("data.outcome", "o", "o", "outcome", "Make the column an outcome, or no longer one.", edits=True),
    _key("data.score", "s", "s", "score", "Make the column the score that the cutoff was applied to.", edits=True),
    _key("data.site", "i", "i", "site", "Make the column the site, which says which cutoff applies.", edits=True),
    _key("data.take_up", "p", "p", "take-up", "Make the column the take-up: whether the programme was really taken.", edits=True),
    _key("data.cluster", "c", "c", "cluster", "Make the column the cluster: its rows are not independent.", edits=True),
    _key("data.weight", "w", "w", "weight", "Make the column the sampling weight.", edits=True),
    _key("data.covariate", "a", "a", "covariate", "Make the column a covariate, measured before assignment, or no longer one.", edits=True),
    _key("data.none", "n", "n", "none", "Take every role away from the column.", edits=True),
    _key("data.rows", "r", "r", "rows", "Keep only rows that meet a condition, with a live count.", edits=True),
    _key("data.details", "enter", "Enter", "values", "The column's spread and its value labels as a table.", footer=False),
    _key("data.open", "f", "f", "open", "Open a data file or another study."),
    _key("data.title", "e", "e", "title", "Name the study.", footer=False, edits=True),
)  # fmt: skip

_ASSIGNMENT: Final[tuple[Key, ...]] = (
    _key("assignment.left", "left", "←", "line", "Move the line a little down.", footer=False),
    _key("assignment.right", "right", "→", "move line", "Move the line a little up.", pair="←→"),
    _key("assignment.far_left", "down", "↓", "far", "Move the line a long way down.", footer=False),
    _key("assignment.far_right", "up", "↑", "by much", "Move the line a long way up.", pair="↑↓"),
    _key("assignment.set", "enter", "Enter", "set it", "Make the line where it stands the study's cutoff.", edits=True),
    _key("assignment.back", "escape", "Esc", "put back", "Put the line back on the study's cutoff."),
    _key("assignment.cutoff", "c", "c", "type", "Type the cutoff.", edits=True),
    _key("assignment.side", "s", "s", "side", "Change which side is treated, and where a unit on the line falls.", edits=True),
    _key("assignment.sites", "e", "e", "sites", "Sites and their cutoffs as a table: set in place, pasted, or read from a file or a column."),
    _key("assignment.zoom", "z", "z", "zoom", "See all of the score, or only what is near the line."),
    _key("assignment.numbers", "t", "t", "table", "The numbers behind the picture as a table."),
)  # fmt: skip

_EFFECT: Final[tuple[Key, ...]] = (
    _key("effect.narrower", "left", "←", "narrower", "Make the bandwidth a little narrower.", footer=False),
    _key("effect.wider", "right", "→", "width", "Make the bandwidth a little wider.", pair="←→"),
    _key("effect.much_narrower", "down", "↓", "much narrower", "Make the bandwidth much narrower.", footer=False),
    _key("effect.much_wider", "up", "↑", "by much", "Make the bandwidth much wider.", pair="↑↓"),
    _key("effect.best", "b", "b", "best", "Stand at the width that the rule gives (the MSE rule if the study names none)."),
    _key("effect.back", "escape", "Esc", "study's own", "Go back to the study's own width.", footer=False),
    _key("effect.keep", "enter", "Enter", "keep", "Make the width where you stand the study's own.", edits=True),
    _key("effect.width", "w", "w", "type a width", "Type the bandwidth.", footer=False),
    _key("effect.choices", "f", "f", "choices", "Every choice of the estimate in one form."),
    _key("effect.outcome", "o", "o", "outcome", "See the next outcome."),
    _key("effect.site", "s", "s", "site", "See the next site by itself; after the last one, all of them together.", footer=False),
    _key("effect.kernel", "k", "k", "kernel", "Take the next kernel.", edits=True),
    _key("effect.order", "p", "p", "order", "Take the next order of the local polynomial.", edits=True),
    _key("effect.interval", "i", "i", "interval", "Let the next interval lead: robust, bias-aware or plain.", edits=True),
    _key("effect.donut", "d", "d", "donut", "Leave out the rows nearest to the line: type how near.", edits=True),
    _key("effect.covariates", "c", "c", "covariates", "Let the covariates adjust the headline, or not.", edits=True),
    _key("effect.seal", "S", "S", "seal", "Seal the plan: freeze the study's choices, after which the outcome is shown.", footer=False),
    _key("effect.numbers", "t", "t", "table", "The numbers behind the picture as a table."),
    _key("effect.weights", "e", "e", "each unit", "Draw how much each unit counts on both sides, with the numbers as a table.", footer=False),
    _key("effect.seen", "l", "l", "looked at", "Every width you stood at in this sitting; Enter goes back to one.", footer=False),
)  # fmt: skip

_ABOUT_WIDTH = Concept(
    word="bandwidth",
    said="How close to the line counts as close. Narrower compares more alike units but fewer of them, so the answer is less "
    "biased and less sure. A finding that lives at one width only is no finding.",
)
_EFFECT_CONCEPTS: Final = (
    _ABOUT_WIDTH,
    Concept(
        word="robust",
        said="The robust bias-corrected interval moves the estimate by its estimated bias and widens it for not knowing that "
        "bias. It leads unless you choose another.",
    ),
    Concept(
        word="bias-aware",
        said="Covers the truth whenever the curve on each side bends no more than a stated bound, however few scores there "
        "are. It leads with lumpy scores.",
    ),
    Concept(
        word="plain",
        said="The textbook interval. It takes the local line to be exactly true, so it covers less often than it says. "
        "Shown for comparison.",
    ),
    Concept(
        word="local randomisation",
        said="Takes the units in a small window around the line to be as good as drawn by lot, and asks how often such a "
        "difference would come up by the draw alone.",
    ),
    Concept(
        word="weight of a unit",
        said="The effect is a weighted sum of outcomes, and these are the weights. With a sloped fit some far units count against "
        "their own side; the less of that, the easier the answer is to defend.",
    ),
    Concept(
        word="donut",
        said="Leaves out the units nearest to the line, who had most reason and chance to place themselves across it.",
    ),
)

_COMPARE: Final[tuple[Key, ...]] = (
    _key("compare.narrower", "left", "←", "narrower", "Make the common bandwidth of all sites a little narrower.", footer=False),
    _key("compare.wider", "right", "→", "common width", "Make the common bandwidth of all sites a little wider.", pair="←→"),
    _key("compare.much_narrower", "n", "n", "much narrower", "Make the common bandwidth much narrower.", footer=False),
    _key("compare.much_wider", "m", "m", "by much", "Make the common bandwidth much wider.", pair="nm"),
    _key("compare.own", "escape", "Esc", "own widths", "Let each site stand at its own bandwidth again."),
    _key("compare.width", "w", "w", "type a width", "Type one bandwidth for all sites.", footer=False),
    _key("compare.open", "enter", "Enter", "open", "Open the site under the cursor on the Effect screen."),
    _key("compare.sort", "s", "s", "sort", "Sort by name, by cutoff, by effect or by rows."),
    _key("compare.outcome", "o", "o", "outcome", "Compare the sites in the next outcome."),
    _key("compare.said", "d", "d", "together", "All that the sites say together, in sentences."),
    _key("compare.numbers", "t", "t", "table", "The numbers behind the picture as a table."),
)  # fmt: skip

PLACES: Final[tuple[Place, ...]] = (
    Place(
        name="data",
        digit="1",
        title="Data",
        about="Each column of the file, and the part it plays in the study.",
        keys=_DATA,
        concepts=(
            Concept(word="score", said="The number that decided who was treated, also called the running variable."),
            Concept(word="outcome", said="What the programme may have changed. A study may have several."),
            Concept(word="site", said="Says which cutoff applies to a row, when they differ: a district, a year, a round."),
            Concept(word="take-up", said="Whether the programme was really taken. Naming it makes the study fuzzy."),
            Concept(word="covariate", said="Measured before assignment, so the programme can't have changed it."),
        ),
    ),
    Place(
        name="assignment",
        digit="2",
        title="Assignment",
        about="The rule that made some units treated: the line, and the side it treats.",
        keys=_ASSIGNMENT,
        concepts=(
            Concept(word="cutoff", said="Where on the score the line runs."),
            Concept(
                word="on the line",
                said="Units whose score equals the cutoff. The treated side says whether they are treated; many of them, or "
                "a pile on one side, is a reason to ask how scores were given.",
            ),
            Concept(
                word="against the rule",
                said="Units whose take-up is not what the rule says: untreated on the treated side, or treated on the other.",
            ),
        ),
    ),
    Place(
        name="effect",
        digit="3",
        title="Effect",
        about="What the programme changed at the line, at a width you move.",
        keys=_EFFECT,
        concepts=_EFFECT_CONCEPTS,
    ),
    Place(
        name="compare",
        digit="4",
        title="Compare",
        about="Effects of several sites, steps or stretches beside each other, and what they say together.",
        keys=_COMPARE,
        concepts=(
            Concept(
                word="site",
                said="A place, year or round with a cutoff of its own. Each has its own effect, its own interval and its own rows.",
            ),
            Concept(
                word="pooled",
                said="All sites together, each unit measured from its own cutoff. It weighs the sites by how many units "
                "stand at their lines: that is each site's share.",
            ),
            Concept(
                word="drawn toward the mean",
                said="A site's effect moved toward the mean of all, the further the less it knows by itself. It is the better "
                "guess for one site; the interval of the site alone stays the honest test.",
            ),
            Concept(
                word="all at once",
                said="With many sites some interval misses by chance. This wider band holds at every site together.",
            ),
        ),
    ),
    Place(
        name="doubts",
        digit="5",
        title="Doubts",
        about="What could be wrong, asked one by one.",
        awaits="Doubts will ask one by one what could be wrong with the design, each with its test, number and finding.",
    ),
    Place(
        name="release",
        digit="6",
        title="Release",
        about="What may leave.",
        awaits="Release will show which tables, figures and records may leave, and what the disclosure guard did to each.",
    ),
)  # fmt: skip
BY_NAME: Final = {place.name: place for place in PLACES}

IN_LISTS: Final = (
    ("↑ ↓ or j k", "one row"),
    ("PgUp PgDn", "one page"),
    ("g G", "first and last row"),
    ("← → or h l", "sideways"),
)


def keys_of(place: str) -> tuple[Key, ...]:
    """Every key that works on a screen: its own first, then those that work everywhere."""
    return (*BY_NAME[place].keys, *EVERYWHERE)


def key_named(id: str) -> Key:
    """The key with an id; KeyError where there is none."""
    for key in _all_keys():
        if key.id == id:
            return key
    raise KeyError(id)


def bindings_of(place: str) -> list[Binding]:
    """The bindings of a screen. Each leads to `action_key`, where an action that can't run now says why."""
    bindings = [
        Binding(",".join(key.keys), f"key('{key.id}')", key.label, show=False, id=key.id)
        for key in keys_of(place)
    ]
    bindings += [
        Binding(other.digit, f"app.stand('{other.name}')", other.title, show=False, id=f"go.{other.name}")
        for other in PLACES
    ]
    return bindings


def key_list_markdown() -> str:
    """The key list as Markdown, for the README: a table for each screen."""
    parts = []
    for title, keys in _chapters():
        rows = [f"| {_cell(key.shown)} | {_cell(key.help)} |" for key in keys]
        parts.append("\n".join([f"### {title}", "", "| key | does |", "|---|---|", *rows]))
    lists = [f"| {_cell(shown)} | Move by {said}. |" for shown, said in IN_LISTS]
    parts.append("\n".join(["### In lists and tables", "", "| key | does |", "|---|---|", *lists]))
    return "\n\n".join(parts) + "\n"


def with_key_list(text: str) -> str:
    """A Markdown text with the key list put between its two marks, `<!-- keys -->` and `<!-- /keys -->`.

    Raises
    ------
    ValueError
        When a mark is missing.
    """
    before, first, rest = text.partition("<!-- keys -->")
    _, last, after = rest.partition("<!-- /keys -->")
    if not first or not last:
        raise ValueError("the marks <!-- keys --> and <!-- /keys --> are not both there")
    return f"{before}{first}\n{key_list_markdown()}{last}{after}"


def _chapters() -> Iterator[tuple[str, tuple[Key, ...]]]:
    numbers = tuple(
        Key(id=f"go.{place.name}", keys=(place.digit,), shown=place.digit, label=place.title, help=f"{place.title}. {place.about}")
        for place in PLACES
    )  # fmt: skip
    yield "On every screen", (*numbers, *EVERYWHERE)
    for place in PLACES:
        if place.keys:
            yield place.title, place.keys


def _all_keys() -> Iterator[Key]:
    yield from EVERYWHERE
    for place in PLACES:
        yield from place.keys


def _cell(text: str) -> str:
    return text.replace("|", "\\|")


def _write_key_list(path: str) -> None:
    from pathlib import Path

    readme = Path(path)
    readme.write_text(with_key_list(readme.read_text(encoding="utf-8")), encoding="utf-8")


if __name__ == "__main__":  # python -m tui.keys: bring the README's key list up to date
    _write_key_list("README.md")
