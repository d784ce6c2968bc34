"""One line that asks for a text while the reading above it stays alive.

One rule: an answer that cannot be used stays in the line with the reason beside it; Escape leaves all as it was. An
answer may bring the next question.
"""

from __future__ import annotations

from collections.abc import Callable

from textual import events
from textual.app import ComposeResult
from textual.containers import Horizontal
from textual.widgets import Input

from ..door import visible
from ..drawing.line import Line, fit
from .key_bar import KeyBar
from .rows import Rows

__all__ = ["Prompt"]


class Prompt(Horizontal):
    """Hidden until `ask` is called."""

    BINDINGS = [("escape", "dismiss", "leave")]  # noqa: RUF012  the library declares it so

    def __init__(self, id: str) -> None:
        """A hidden prompt."""
        super().__init__(id=id)
        self._use: Callable[[str], None] = lambda text: None
        self._leave: Callable[[], None] = lambda: None
        self._question = ""
        self._asked = 0
        self.display = False

    def compose(self) -> ComposeResult:
        """The question, the answer."""
        yield Rows("prompt-question")
        yield Input(compact=True, select_on_focus=False)

    def ask(
        self, question: str, answer: str, use: Callable[[str], None], leave: Callable[[], None] = lambda: None
    ) -> None:
        """Ask; `use` takes the answer, and raises ValueError with the reason where it cannot; Escape calls `leave`."""
        self._use, self._leave, self._question = use, leave, question
        self._asked += 1
        self._swap(asking=True)
        self.question.styles.width = len(question) + 1
        self.question.show([((question, "strong"),)])
        line = self.query_one(Input)
        line.value = answer
        line.cursor_position = len(answer)
        self.screen.set_focus(line)  # at once: the next key is already for the answer

    @property
    def question(self) -> Rows:
        """The widget that shows the question."""
        return self.query_one("#prompt-question", Rows)

    def on_input_submitted(self, event: Input.Submitted) -> None:
        """Use the answer, or say why not."""
        event.stop()
        asked = self._asked
        try:
            self._use(event.value)
        except ValueError as error:
            self._refuse(str(error))
            return
        if asked == self._asked:
            self.withdraw()

    def on_descendant_blur(self, event: events.DescendantBlur) -> None:
        """A click elsewhere leaves the question; word of the last one's end may come when the next is already asked."""
        if self.screen.focused is not self.query_one(Input):
            self.action_dismiss()

    def action_dismiss(self) -> None:
        """Hide without using the answer."""
        if self.display:
            self.withdraw()
            self._leave()

    def withdraw(self) -> None:
        """The question is over; the keys come back in the same line."""
        if self.display:
            self._swap(asking=False)
            self.screen.set_focus(None)

    def _swap(self, asking: bool) -> None:
        self.display = asking
        self.screen.query_one(KeyBar).display = not asking

    def _refuse(self, reason: str) -> None:
        room = max(20, self.size.width - 16)
        text = fit(visible(reason), room - 1)
        self.question.styles.width = len(text) + 1
        self.question.show([Line(len(text)).put(0, text, "word").row()])
