"""The screens by name. A new screen is one line here."""

from __future__ import annotations

from .live import LiveScreen
from .tune_up import TuneUp

__all__ = ["SCREENS", "LiveScreen"]

SCREENS: dict[str, type[LiveScreen]] = {"tune-up": TuneUp}
