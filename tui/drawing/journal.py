"""How recording stands, in a word for the reading's own screen and in a sentence.

One rule: a journal that is well is named in one quiet word; one that is not says what happened, and is an alarm.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from .line import Piece

if TYPE_CHECKING:
    from bridgeio.journal import JournalState

__all__ = ["journal_sentence", "journal_trouble", "journal_word"]

#: Phase of a journal -> its word and the word's role.
_WORDS: dict[str, Piece] = {
    "recording": ("journal", "quiet"),
    "slow": ("journal slow", "word"),
    "stopped": ("journal stopped", "over"),
    "moved": ("journal moved", "over"),
    "closed": ("journal closed", "word"),
}
_ALARMING = ("stopped", "moved")


def journal_word(state: JournalState | None) -> Piece:
    """A word and its role; an empty one where nothing is recorded."""
    return ("", "") if state is None else _WORDS.get(state.phase, (f"journal {state.phase}", "word"))


def journal_trouble(state: JournalState | None) -> tuple[str, ...]:
    """The name under which a journal rings the bell; none where it is well. A moved one that then stops rings again."""
    return () if state is None or state.phase not in _ALARMING else (f"journal {state.phase}",)


def journal_sentence(state: JournalState | None) -> Piece:
    """The state as a person would say it, raw outside text in it, and its role."""
    if state is None:
        return "no journal is kept: begin with --journal FILE", "quiet"
    return state.words, {"recording": "", "slow": "word", "closed": "word"}.get(state.phase, "over")
