"""In which order the questions of a poll are asked, and which not in every poll.

On a bus with several units one may be dead, and each question to it costs a time-out and a new start of
the conversation. So questions that stayed unanswered are asked after the others, and from the second
silent time on in every second, fourth, at last every eighth poll only. Questions for which no time was left
come first in the next poll, so that a poll that is too short for all takes turns.
"""

from __future__ import annotations

from typing import Final

from drivers.base import MISSING
from drivers.conversation import NoAnswer

REST_MOST: Final = 8
"""A silent question is asked in every eighth poll at least."""


class Rota:
    """The turns of ``questions`` questions, by their number."""

    def __init__(self, questions: int) -> None:
        self._silent = [0] * questions
        self._rest = [0] * questions
        self._left_out = [False] * questions

    def turn(self) -> list[int]:
        """Return the questions of this poll, those silent last time at the end."""
        due = [i for i, rest in enumerate(self._rest) if rest == 0]
        self._rest = [max(0, rest - 1) for rest in self._rest]
        return sorted(due, key=lambda i: (self._silent[i] > 0, not self._left_out[i]))

    def note(self, question: int, answer: object) -> None:
        """Take down how a question was answered."""
        self._left_out[question] = isinstance(answer, NoAnswer) and not answer.asked
        if not isinstance(answer, NoAnswer):
            self._silent[question] = 0
        elif answer.asked and answer.quality == MISSING and len(self._rest) > 1:
            self._silent[question] += 1
            if self._silent[question] >= 2:
                self._rest[question] = min(REST_MOST, 2 ** (self._silent[question] - 1)) - 1
