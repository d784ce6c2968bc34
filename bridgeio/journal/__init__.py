"""The journal: every good frame of a recording in one file, bytes and counts only; readings are made from it anew."""

from .book import Mark, Stretch
from .gather import Counts, Gathered
from .lock import JournalHeld
from .reader import Account, BadBlock, Journal, KeptBlock
from .writer import JournalState, Writer

__all__ = [
    "Account",
    "BadBlock",
    "Counts",
    "Gathered",
    "Journal",
    "JournalHeld",
    "JournalState",
    "KeptBlock",
    "Mark",
    "Stretch",
    "Writer",
]
