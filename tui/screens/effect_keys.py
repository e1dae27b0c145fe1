"""The keys of the Effect screen: what each does to the width, to the choices, and which pages it opens."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Final

from estimation.choices import INTERVALS, KERNELS, ORDERS
from tui.screens.room import Room, number
from tui.screens.widths import COARSE, next_width, round_width
from tui.slot import Slot

if TYPE_CHECKING:
    from estimation.line import Sweep
    from tui.screens.effect_words import Standing
    from tui.screens.effect_work import Asked, Found, Prepared

_RETURNED: Final = (
    "kernel",
    "order",
    "interval",
    "donut",
    "level",
    "variance",
    "curvature",
    "adjust",
    "pilot",
)
"""Choices put back when a person returns to what was looked at; the width is where they stand, not a choice."""


class EffectKeys(Room):
    """What the Effect screen's keys do; what is shown is the subclass's.

    Attributes
    ----------
    prepared
        The line of the outcome that is looked at, once it is there.
    swept
        Its effect against the width, once that is there.
    width
        Where the person stands; None at the study's own width.
    site
        The site that is looked at; None for all of them, or where the study has one line.
    reach
        How far from the line the picture goes.
    seen
        What was looked at, the latest last.
    standing
        What is shown.
    on_words
        Told after the words have changed, for a page that shows them too.
    """

    prepared: Prepared | None = None
    swept: Sweep | None = None
    width: float | None = None
    site: str | None = None
    reach: float | None = None
    seen: list[Found]
    standing: Standing | None = None
    on_words: Callable[[], None] | None = None
    best_slot: Slot[Asked, float]

    @property
    def outcome(self) -> str:
        """The outcome that is looked at, "" where the study has none."""
        raise NotImplementedError

    def stand(self, width: float | None) -> None:
        """Stand at a width, None for the study's own."""
        raise NotImplementedError

    def look_at(self, outcome: str, *, site: str | None = None, width: float | None = None) -> None:
        """Look at another outcome, or another site."""
        raise NotImplementedError

    def _walk(self, steps: int) -> None:
        prepared = self.prepared
        if prepared is None:
            return
        own = max(prepared.own.below, prepared.own.above)
        width = next_width(self.width if self.width is not None else own, steps)
        self.stand(min(max(width, prepared.narrowest), round_width(prepared.widest)))

    def why_not(self, action: str) -> str:
        """Most keys need an effect on screen."""
        desk = self.bench.desk
        if desk is None:
            return "No study is open: f on the Data screen opens one"
        if action in ("choices", "kernel", "order", "interval", "donut"):
            return ""
        if action == "seal":
            return self._why_not_seal()
        if action == "covariates":
            return "" if desk.study.columns.covariates else "This study names no covariates"
        if action == "site":
            workbench = self.bench.workbench
            return "" if workbench is not None and workbench.sites else "This study has one line"
        if action == "outcome":
            return "" if len(desk.study.columns.outcomes) > 1 else "This study has one outcome"
        if self.prepared is None:
            return "There is no effect to look at yet"
        if action == "keep" and self.width is None:
            return "You stand at the study's own width"
        if action == "back" and self.width is None:
            return "You stand at the study's own width already"
        return ""

    def do_narrower(self) -> None:
        """Key left."""
        self._walk(-1)

    def do_wider(self) -> None:
        """Key right."""
        self._walk(1)

    def do_much_narrower(self) -> None:
        """Key down."""
        self._walk(-COARSE)

    def do_much_wider(self) -> None:
        """Key up."""
        self._walk(COARSE)

    def do_back(self) -> None:
        """Key escape."""
        self.stand(None)

    def do_best(self) -> None:
        """Key b: where the study's own width is a rule's, that is it; else the MSE rule is asked."""
        prepared = self.prepared
        assert prepared is not None
        if prepared.own.rule != "chosen" and not prepared.own.rule.endswith("per side"):
            self.stand(None)
            return
        from tui.screens.effect_work import Asked

        self.best_slot.ask(
            Asked(workbench=prepared.workbench, outcome=prepared.outcome, width=None, site=prepared.site)
        )

    def show_best(self, asked: Asked, width: float) -> None:
        """The MSE rule has answered."""
        if self.prepared is not None and asked.workbench is self.prepared.workbench:
            self.stand(width)
            self.tell("The MSE-optimal width; Enter makes it the study's own.")

    def do_keep(self) -> None:
        """Key enter."""
        if self.width is not None:
            self.change({"estimate.bandwidth": self.width})

    def do_width(self) -> None:
        """Key w."""
        prepared = self.prepared
        assert prepared is not None
        own = max(prepared.own.below, prepared.own.above)
        now = self.width if self.width is not None else own

        def take(text: str) -> str:
            width = number(text)
            if width is None or width <= 0:
                return f"“{text}” is not a width: type a number above 0, in units of the score."
            if width > prepared.widest:
                return f"No score is that far from the line: the farthest is {prepared.widest:.4g} away."
            self.stand(width)
            return ""

        self.ask("Bandwidth", f"{now:.4g}", take, hint="In units of the score, the same on both sides.")

    def _why_not_seal(self) -> str:
        from study.plan import plan_path

        desk, workbench = self.bench.desk, self.bench.workbench
        if desk is not None and plan_path(desk.study).exists():
            return "The plan is sealed already; what differs from it now is marked"
        if workbench is None:
            return "The study is not complete, or its data are still being read"
        return "" if desk is None or not desk.why_read_only else desk.why_read_only

    def do_seal(self) -> None:
        """Key S: asked back once, since a seal can't be taken back."""

        def take(text: str) -> str:
            if text.lower() != "seal":
                return "Type the word seal, or press Esc to leave the plan open."
            self._seal()
            return ""

        self.ask(
            "Seal the plan? Later changes are marked as departures from it.",
            "",
            take,
            hint="Type seal and press Enter.",
        )

    def _seal(self) -> None:
        from study.commands.seal import freeze  # the same act as on the command line
        from study.errors import StudyError

        desk, workbench = self.bench.desk, self.bench.workbench
        assert desk is not None and workbench is not None  # `why_not` saw to it
        try:
            sealed = freeze(desk.study, fingerprint=workbench.assigned.fingerprint)
        except StudyError as error:
            self.bench.tell(f"{error.what} {error.do}", warning=True)
            return
        self.bench.read_again()
        self.bench.tell(f"The plan is sealed, by {sealed.by}. The outcome may be seen now.")

    def do_choices(self) -> None:
        """Key f."""
        from tui.screens.effect_pages import ChoicesPage

        self.bench.push_screen(ChoicesPage(self))

    def do_outcome(self) -> None:
        """Key o."""
        desk = self.bench.desk
        assert desk is not None
        names = desk.study.columns.outcomes
        self.look_at(names[(names.index(self.outcome) + 1) % len(names)], site=self.site)

    def do_site(self) -> None:
        """Key s: the next site; after the last one all of them."""
        workbench = self.bench.workbench
        assert workbench is not None
        places = (None, *workbench.sites)
        now = places.index(self.site) if self.site in places else 0
        self.look_at(self.outcome, site=places[(now + 1) % len(places)])

    def _next(self, key: str, words: tuple[object, ...], now: object) -> None:
        place = words.index(now) if now in words else -1
        new = words[(place + 1) % len(words)]
        if self.change({key: new}):
            self.tell(f"{key.partition('.')[2]}: {new}.")

    def do_kernel(self) -> None:
        """Key k."""
        self._next("estimate.kernel", KERNELS, self._study_choice("kernel"))

    def do_order(self) -> None:
        """Key p."""
        self._next("estimate.order", ORDERS, self._study_choice("order"))

    def do_interval(self) -> None:
        """Key i."""
        self._next("estimate.interval", INTERVALS, self._study_choice("interval"))

    def do_covariates(self) -> None:
        """Key c."""
        self._next("estimate.adjust", (False, True), self._study_choice("adjust"))

    def _study_choice(self, name: str) -> object:
        desk = self.bench.desk
        assert desk is not None
        return getattr(desk.study.estimate, name)

    def do_donut(self) -> None:
        """Key d."""

        def take(text: str) -> str:
            near = number(text or "0")
            if near is None:
                return f"“{text}” is not a number: type how near to the line rows are left out, 0 for none."
            return self.bench.try_change({"estimate.donut": near})

        value = f"{self._study_choice('donut'):g}"
        self.ask(
            "Donut: leave out rows nearer to the line than",
            value,
            take,
            hint="In units of the score; 0 keeps every row.",
        )

    def do_numbers(self) -> None:
        """Key t."""
        from tui.screens.effect_pages import numbers_page

        assert self.prepared is not None and self.reach is not None
        self.bench.push_screen(numbers_page(self.prepared, self.reach, self.swept))

    def do_weights(self) -> None:
        """Key e."""
        from tui.screens.weights_page import WeightsPage

        self.bench.push_screen(WeightsPage(self))

    def do_seen(self) -> None:
        """Key l."""
        from tui.screens.effect_pages import seen_page

        self.bench.push_screen(seen_page(self.seen, self._return_to))

    def _return_to(self, found: Found) -> None:
        """Go back to something that was looked at: its choices are put back as a change that can be undone."""
        desk = self.bench.desk
        if desk is None:
            return
        choices = found.effect.choices
        back = {
            f"estimate.{name}": getattr(choices, name)
            for name in _RETURNED
            if getattr(desk.study.estimate, name) != getattr(choices, name)
        }
        if back:
            self.change(back)
        if (found.outcome, found.site) != (self.outcome, self.site):
            self.look_at(found.outcome, site=found.site)
        # The study's own width, as long as it is still chosen the same way, else the number that it was.
        at = found.effect.bandwidths
        same = desk.study.estimate.bandwidth == choices.bandwidth
        then = round_width(max(at.below, at.above)) if found.width is None else found.width
        self.stand(None if found.width is None and same else then)
