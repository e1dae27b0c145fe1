"""Every key of the study file, declared once.

The file check, the app's forms, the messages and the generated bad-value tests all read this table.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final, Literal

from estimation.choices import BANDWIDTH_RULES, INTERVALS, KERNELS, ORDERS, PILOT_RULES, VARIANCES, Choices
from study.literal import quoted

Kind = Literal[
    "text",
    "yes/no",
    "whole number",
    "number",
    "word",
    "word or number",
    "word, number or pair",
    "text list",
    "number list",
    "number table",
    "whole number or text",
    "word or file",
]

RULES: Final = ("cutoff", "cutoffs", "steps", "boundary", "frontier")
SCORE_SIDES: Final = ("at or above", "above", "at or below", "below")
AREA_SIDES: Final = ("inside", "outside")
PROFILES: Final = ("threshold-10", "census-ladder")

_DEFAULTS: Final = Choices()


@dataclass(frozen=True, slots=True, kw_only=True)
class Option:
    """One key of the study file.

    Attributes
    ----------
    section, key
        Where it stands; `section` is dotted for a table in a table.
    kind
        What a value may be; "word" is one of `allowed`.
    allowed
        The words that a "word…" kind takes.
    default
        The value when the file does not give it; None for an optional key without one.
    help
        One line on what it does.
    least, most
        Smallest and largest number, or None.
    least_excluded, most_excluded
        Whether the bound itself is not allowed.
    """

    section: str
    key: str
    kind: Kind
    help: str
    allowed: tuple[str, ...] = ()
    default: object = None
    least: float | None = None
    most: float | None = None
    least_excluded: bool = False
    most_excluded: bool = False

    @property
    def name(self) -> str:
        """The dotted name, such as "estimate.kernel"."""
        return f"{self.section}.{self.key}"

    @property
    def expected(self) -> str:
        """What the key takes, as messages and forms say it."""
        words = ", ".join(quoted(word) for word in self.allowed)
        number = f"a {'whole ' if self.kind.startswith('whole') else ''}number{self._range()}"
        return {
            "text": "text in quotes",
            "yes/no": "true or false",
            "whole number": number,
            "number": number,
            "word": words,
            "word or number": f"{words} or {number}",
            "word, number or pair": f"{words}, {number}, or two such numbers as [below, above]",
            "text list": 'a list of different names in quotes, such as ["first", "second"]',
            "number list": "a list of ascending numbers, such as [30.0, 50.0]",
            "number table": "a table of names and numbers, such as { Alder = 52.0 }",
            "whole number or text": f"{number}, or the name of a column in quotes",
            "word or file": f'{words}, or a file of your own such as "ours.toml"',
        }[self.kind]

    def _range(self) -> str:
        if self.least is not None and self.most is not None:
            if self.least_excluded and self.most_excluded:
                return f" between {self.least:.0f} and {self.most:.0f}, both excluded"
            return f" from {self.least:.0f} to {self.most:.0f}"
        if self.least is not None:
            return f" {'above' if self.least_excluded else 'of at least'} {self.least:.0f}"
        return ""


OPTIONS: Final[tuple[Option, ...]] = (
    Option(
        section="study", key="title", kind="text", default="", help="The study's name, as reports show it."
    ),
    Option(
        section="study",
        key="seed",
        kind="whole number",
        default=1,
        least=0,
        most=2**32 - 1,
        help="Every random step follows from this number.",
    ),
    Option(
        section="study",
        key="masked",
        kind="yes/no",
        default=True,
        help="Keep outcome effects masked until the plan is sealed.",
    ),
    Option(
        section="data", key="path", kind="text", default="", help="The data file, relative to the study file."
    ),
    Option(section="data", key="table", kind="text", help="A table in a DuckDB file."),
    Option(section="data", key="layer", kind="text", help="A layer in a GeoPackage."),
    Option(
        section="data",
        key="rows",
        kind="text",
        help="An SQL condition on the file's own columns: the rows to read.",
    ),
    Option(
        section="columns",
        key="outcomes",
        kind="text list",
        default=(),
        help="What the programme may have changed; one or more columns.",
    ),
    Option(section="columns", key="score", kind="text", help="The score that the cutoff was applied to."),
    Option(section="columns", key="site", kind="text", help="Says which cutoff applies to a row."),
    Option(
        section="columns",
        key="take_up",
        kind="text",
        help="Whether the programme was really taken; makes the study fuzzy.",
    ),
    Option(
        section="columns", key="cluster", kind="text", help="Rows that share this value are not independent."
    ),
    Option(section="columns", key="weight", kind="text", help="Sampling weight."),
    Option(
        section="columns",
        key="covariates",
        kind="text list",
        default=(),
        help="Columns measured before assignment.",
    ),
    Option(section="columns", key="x", kind="text", help="Easting, for a boundary in projected coordinates."),
    Option(
        section="columns", key="y", kind="text", help="Northing, for a boundary in projected coordinates."
    ),
    Option(section="columns", key="longitude", kind="text", help="Longitude in degrees, for a boundary."),
    Option(section="columns", key="latitude", kind="text", help="Latitude in degrees, for a boundary."),
    Option(
        section="assignment",
        key="rule",
        kind="word",
        allowed=RULES,
        default="cutoff",
        help="The kind of line that made some rows treated.",
    ),
    Option(
        section="assignment",
        key="treated",
        kind="word",
        allowed=SCORE_SIDES + AREA_SIDES,
        default="at or above",
        help="The treated side, and where a row on the line falls.",
    ),
    Option(section="assignment", key="cutoff", kind="number", help="The cutoff, in units of the score."),
    Option(
        section="assignment",
        key="steps",
        kind="number list",
        default=(),
        help="Several cutoffs on one score, ascending.",
    ),
    Option(
        section="assignment",
        key="doses",
        kind="number list",
        default=(),
        help="How much is handed out past each step, from the first that a row meets: ascending, one for each step.",
    ),
    Option(
        section="assignment",
        key="cutoff_column",
        kind="text",
        help="A column that holds each row's cutoff.",
    ),
    Option(
        section="assignment",
        key="sites",
        kind="number table",
        default={},
        help="Each site's own cutoff.",
    ),
    Option(
        section="assignment",
        key="site_weights",
        kind="number table",
        default={},
        least=0.0,
        help="How much each site counts in a mean of the study's own; a site that is not named counts nothing.",
    ),
    Option(
        section="assignment.area", key="path", kind="text", help="The file that holds the boundary's area."
    ),
    Option(section="assignment.area", key="layer", kind="text", help="The layer that holds the area."),
    Option(
        section="assignment.area",
        key="crs",
        kind="text",
        help='The coordinate reference system of the file, such as "EPSG:4326".',
    ),
    Option(
        section="assignment.area",
        key="reach",
        kind="number",
        least=0.0,
        least_excluded=True,
        help="Metres kept on each side of the boundary.",
    ),
    Option(
        section="assignment.area",
        key="segments",
        kind="whole number or text",
        least=1,
        help="Stretches to cut the boundary into, or a column of a line layer.",
    ),
    Option(
        section="assignment.frontier",
        key="all",
        kind="number table",
        help="Treated where every one of these scores passes its cutoff.",
    ),
    Option(
        section="assignment.frontier",
        key="any",
        kind="number table",
        help="Treated where at least one of these scores passes its cutoff.",
    ),
    Option(
        section="estimate",
        key="bandwidth",
        kind="word, number or pair",
        allowed=BANDWIDTH_RULES,
        default=_DEFAULTS.bandwidth,
        least=0.0,
        least_excluded=True,
        help="How close to the line is close: a rule, a width, or one a side.",
    ),
    Option(
        section="estimate",
        key="pilot",
        kind="word or number",
        allowed=PILOT_RULES,
        default=_DEFAULTS.pilot,
        least=0.0,
        least_excluded=True,
        help="Bandwidth of the fit that estimates the bias.",
    ),
    Option(
        section="estimate",
        key="kernel",
        kind="word",
        allowed=KERNELS,
        default=_DEFAULTS.kernel,
        help="How weight falls off with distance from the line.",
    ),
    Option(
        section="estimate",
        key="order",
        kind="whole number",
        default=_DEFAULTS.order,
        least=min(ORDERS),
        most=max(ORDERS),
        help="Order of the local polynomial; 0 compares means.",
    ),
    Option(
        section="estimate",
        key="interval",
        kind="word",
        allowed=INTERVALS,
        default=_DEFAULTS.interval,
        help="The interval that leads.",
    ),
    Option(
        section="estimate",
        key="level",
        kind="number",
        default=_DEFAULTS.level,
        least=0.0,
        most=1.0,
        least_excluded=True,
        most_excluded=True,
        help="Confidence level of every interval.",
    ),
    Option(
        section="estimate",
        key="variance",
        kind="word",
        # "spatial" belongs to boundaries; document.py refuses it elsewhere.
        allowed=tuple(dict.fromkeys((*VARIANCES, "spatial"))),
        default=_DEFAULTS.variance,
        help="How the standard error is computed; a cluster column makes it clustered.",
    ),
    Option(
        section="estimate",
        key="curvature",
        kind="word or number",
        allowed=("auto",),
        default=_DEFAULTS.curvature,
        least=0.0,
        least_excluded=True,
        help="Bound on the second derivative for bias-aware intervals.",
    ),
    Option(
        section="estimate",
        key="donut",
        kind="number",
        default=_DEFAULTS.donut,
        least=0.0,
        help="Rows nearer to the line than this are left out.",
    ),
    Option(
        section="estimate",
        key="adjust",
        kind="yes/no",
        default=_DEFAULTS.adjust,
        help="Let the covariates adjust the answer that leads; both are reported anyway.",
    ),
    Option(
        section="guard",
        key="profile",
        kind="word or file",
        allowed=PROFILES,
        default=PROFILES[0],
        help="The disclosure rules in force: by name, or a file of your own beside the study.",
    ),
)
BY_NAME: Final[Mapping[str, Option]] = {option.name: option for option in OPTIONS}
SECTIONS: Final = tuple(dict.fromkeys(option.section for option in OPTIONS))


def option_named(name: str) -> Option:
    """The option with a dotted name; KeyError where there is none."""
    return BY_NAME[name]
