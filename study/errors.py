"""What went wrong with a study, in one line of what and one of what to do."""

from __future__ import annotations

from typing import Final, Literal

from estimation.errors import CannotEstimate

Status = Literal[1, 2, 3]

CANNOT_ESTIMATE: Final = 1  # the study could not be estimated
BAD_STUDY: Final = 2  # bad usage or a bad study file
BAD_DATA: Final = 3  # data could not be read


class StudyError(Exception):
    """A user's mistake or unusable input; never a defect of the program.

    Parameters
    ----------
    what
        One sentence: what is wrong, where (file, key, column or row), what was found.
    do
        One sentence: what to do about it.
    status
        Exit status of the command line: 1 the study can't be estimated, 2 bad usage or study file, 3 data can't
        be read.
    """

    def __init__(self, what: str, do: str, status: Status = BAD_STUDY) -> None:
        Exception.__init__(self, what, do, status)  # not super(): `Masked` has two parents
        self.what = what
        self.do = do
        self.status = status

    def __str__(self) -> str:
        return f"{self.what}\n{self.do}"


class Masked(StudyError, CannotEstimate):
    """An effect or a level of an outcome was asked for before the plan is sealed.

    It is a `CannotEstimate` too, so that whoever lists what could not be estimated says this sentence in its place.
    """

    def __init__(self, outcome: str) -> None:
        what = f"{outcome} is masked until the plan is sealed: its effects and levels stay hidden."
        StudyError.__init__(
            self,
            what,
            "Seal the plan with cutbank seal STUDY, or S on the Effect screen (or set masked = false under [study]).",
            CANNOT_ESTIMATE,
        )
        self.sentence = self.what
        self.remedy = self.do

    def __str__(self) -> str:
        return StudyError.__str__(self)
