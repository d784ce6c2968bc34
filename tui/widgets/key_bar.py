"""The bottom line with the keys of the screen; a click on one does what the key does.

One rule: it shows what is bound, from the bindings themselves.
"""

from __future__ import annotations

from collections.abc import Sequence

from textual import events

from ..drawing.line import Line, Row
from .rows import Rows

__all__ = ["KeyBar", "draw_keys"]

#: Key as shown, what it does in a word or two, the same for a narrow screen (empty: not shown), and the action.
Key = tuple[str, str, str, str]


class KeyBar(Rows):
    """Keys in the order of their use."""

    def __init__(self, id: str, keys: Sequence[Key]) -> None:
        """`keys`: what is shown of each and its action."""
        super().__init__(id)
        self._keys = tuple(keys)

    def on_mount(self) -> None:
        """Show the keys in the first picture already, which comes before any size is told."""
        self.show([draw_keys(self._keys, self.screen.size.width)[0]])

    def on_resize(self, event: events.Resize) -> None:
        """Fit the keys to the width."""
        self.show([draw_keys(self._keys, event.size.width)[0]])

    async def on_click(self, event: events.Click) -> None:
        """Run the action of the key under the pointer."""
        for first, end, action in draw_keys(self._keys, self.size.width)[1]:
            if action and first <= event.x < end:
                await self.run_action(action)


def draw_keys(keys: Sequence[Key], width: int) -> tuple[Row, list[tuple[int, int, str]]]:
    """The line, and for each key the cells it covers with its action. A narrow line has fewer and shorter words."""
    full = [(key, words, action) for key, words, _, action in keys if words]
    brief = [(key, words, action) for key, _, words, action in keys if words]
    ways = ((full, 3), (full, 2), (brief, 2), (brief, 1))
    texts, gap = next(((texts, gap) for texts, gap in ways if _length(texts, gap) <= width), ways[-1])
    line, at, places = Line(width), 0, []
    for key, words, action in texts:
        line.put_row(at, ((key, "key"), (f" {words}", "quiet")))
        end = at + len(key) + 1 + len(words)
        places.append((at, end, action))
        at = end + gap
    return line.row(), places


def _length(texts: Sequence[tuple[str, str, str]], gap: int) -> int:
    return sum(len(key) + 1 + len(words) + gap for key, words, _ in texts) - gap
