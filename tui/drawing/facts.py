"""A fact of the Link screen: a label and the rest of a sentence that a person could read aloud.

One rule: a fact keeps its place. Where its value is missing the word for why stands there.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from ..messages import View

if TYPE_CHECKING:
    from bridgeio.line_watch import LineFacts

__all__ = ["JUST_NOW_S", "Fact", "age_s", "is_old", "unknown"]

#: A frame younger than this is of now [s].
JUST_NOW_S = 1.0


@dataclass(frozen=True, slots=True)
class Fact:
    """label and text are read one after the other; role is the text's."""

    label: str
    text: str
    role: str = ""


def unknown(label: str) -> Fact:
    """A fact that the bridge does not tell."""
    return Fact(label, "not told", "quiet")


def age_s(view: View, facts: LineFacts) -> float:
    """Age of the last frame of any kind [s]; infinite before there is one."""
    return math.inf if facts.heard_s is None else view.now_s - facts.heard_s


def is_old(view: View, facts: LineFacts) -> bool:
    """Whether no frame has come for long: a bridge that sends crests alone has no reading that could be old."""
    return age_s(view, facts) >= max(JUST_NOW_S, view.lasting_s)
