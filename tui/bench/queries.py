"""Questions asked one after the other, until all answers are there.

One rule: an answer that cannot be used changes nothing; what was answered stays while others are asked.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from .answers import Question

__all__ = ["Queries"]


class Queries:
    """One round of questions."""

    def __init__(self, purpose: str, questions: tuple[Question, ...], use: Callable[[dict[str, Any]], None]) -> None:
        """`use` takes all answers by their keys, and raises ValueError with the reason where it cannot."""
        self.purpose = purpose
        self._questions, self._use = questions, use
        self._answers: dict[str, Any] = {}
        self.said: list[tuple[str, str]] = []
        self._at = 0
        self._skip()

    @property
    def question(self) -> Question:
        """The one to be answered now."""
        return self._questions[min(self._at, len(self._questions) - 1)]

    def answer(self, text: str) -> None:
        """Take an answer as typed; empty takes the default. ValueError with the reason where it cannot be used."""
        question, typed = self.question, text.strip() or self.question.default
        value = question.parse(typed)
        answers = {**self._answers, question.key: value}
        if self._is_last(answers):
            self._use(answers)
        else:
            self.said.append((question.label, typed))
            self._answers = answers
            self._at += 1
            self._skip()

    def _skip(self) -> None:
        while self._at < len(self._questions) and not self._questions[self._at].asked(self._answers):
            self._at += 1

    def _is_last(self, answers: dict[str, Any]) -> bool:
        return not any(question.asked(answers) for question in self._questions[self._at + 1 :])
