"""What can't be computed, said in words that a person can act on."""

from __future__ import annotations


class CannotEstimate(Exception):
    """A question that these data do not answer.

    Parameters
    ----------
    sentence
        One sentence: what can't be computed, where, and what was found.
    remedy
        One sentence: what to do about it.
    """

    def __init__(self, sentence: str, remedy: str) -> None:
        super().__init__(f"{sentence} {remedy}")
        self.sentence = sentence
        self.remedy = remedy
