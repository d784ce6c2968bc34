"""The screens by name, in the order in which the key `s` goes through them. A new screen is one line here."""

from __future__ import annotations

from .bench import Bench
from .link import LinkScreen
from .live import LiveScreen
from .tune_up import TuneUp

__all__ = ["SCREENS", "LiveScreen"]

SCREENS: dict[str, type[LiveScreen]] = {"tune-up": TuneUp, "link": LinkScreen, "bench": Bench}
