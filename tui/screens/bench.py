"""The Bench screen: what is known, what to do next, and the law growing under the builder's hands.

One rule: the keyboard alone does everything, and no key does what has not been announced in the line above it.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, ClassVar

from textual.app import ComposeResult
from textual.binding import Binding, BindingType

from ..drawing.edges import draw_status
from ..drawing.line import Line, Row, outside
from ..messages import View
from ..widgets.key_bar import KeyBar
from ..widgets.prompt import Prompt
from ..widgets.rows import Rows
from .live import LiveScreen

if TYPE_CHECKING:
    from ..bench.work import BenchWork

__all__ = ["KEYS", "SIMULATED_KEY", "Bench"]

#: As in the other screens: key, words, words for a narrow screen, action.
KEYS = (
    ("Enter", "go on", "on", "screen.go_on"),
    ("n", "own", "", "screen.own_step"),
    ("u", "undo", "", "screen.undo"),
    ("v", "volts", "", "screen.next_unit"),
    ("w", "write", "", "screen.write"),
    ("s", "screens", "screen", "app.next_screen"),
    ("?", "help", "help", "app.help"),
    ("q", "quit", "quit", "app.quit"),
)
#: On the simulated bench alone.
SIMULATED_KEY = ("k", "key", "key", "screen.key")
_EVERY_S = 0.1
_NO_FILE = (
    "The bench needs a file: bridgewright watch SOURCE --bench FILE.",
    "FILE is a new bench sheet, or one or a bridge file to go on with.",
)


class Bench(LiveScreen):
    """See the module."""

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("enter", "go_on", "go on"),
        Binding("escape", "leave", "leave"),
        Binding("down", "move(1)", "down"),
        Binding("up", "move(-1)", "up"),
        Binding("pagedown", "move(6)", "page down"),
        Binding("pageup", "move(-6)", "page up"),
        *(
            Binding(key, action, words)
            for key, words, _, action in (*KEYS, SIMULATED_KEY)
            if len(key) == 1 and action.startswith("screen.")
        ),
    ]

    def __init__(self) -> None:
        """Nothing is open yet; files are read after the first paint."""
        super().__init__()
        self._work: BenchWork | None = None
        self._asked = ""
        self._left_reading = False
        self._rung = False

    def compose(self) -> ComposeResult:
        """From top to bottom; the body has what the lines around it leave."""
        simulated = self.owner.bench is not None and self.owner.bench.simulated
        yield Rows("status")
        yield Rows("bench")
        yield KeyBar("keys", (KEYS[0], SIMULATED_KEY, *KEYS[1:]) if simulated else KEYS)
        yield Prompt("prompt")

    def on_mount(self) -> None:
        """Begin to look after the first paint."""
        super().on_mount()
        self.set_interval(_EVERY_S, self._tick)

    def on_unmount(self) -> None:
        """The sitting is over."""
        if self._work is not None:
            self._work.stop()

    def paint(self, view: View) -> None:
        """Keep `view` for the next tick; the first is drawn at once."""
        first, self._view = self._view is None, view
        if first:
            self.draw(view)

    def draw(self, view: View) -> None:
        """Hand each widget its rows."""
        body = self.rows("bench")
        width, height = body.size.width or self.size.width, body.size.height or self.size.height - 2
        self.rows("status").show([self._status(view, width)])
        body.show(self._body(width, height))

    def action_move(self, rows: int) -> None:
        """Another line of the list."""
        if self._work is not None:
            self._work.move(rows)
            self.redraw()

    def action_go_on(self) -> None:
        """Enter: what the instruction says."""
        if self._work is not None:
            self._left_reading = False
            self._do(self._work.go_on)

    def action_leave(self) -> None:
        """Give the step in hand up."""
        if self._work is not None and self._work.run is not None:
            self._do(self._work.run.leave)

    def action_own_step(self) -> None:
        """A step of one's own."""
        if self._work is not None:
            self._do(self._work.own_step)

    def action_undo(self) -> None:
        """Take the last step back."""
        if self._work is not None:
            self._do(self._work.undo)

    def action_next_unit(self) -> None:
        """What is read at the dummy: watts or volts."""
        if self._work is not None:
            self._do(self._work.next_unit)

    def action_write(self) -> None:
        """The fit into the file."""
        if self._work is not None:
            self._do(self._work.write)

    def action_key(self) -> None:
        """The simulated transmitter's key, down or up."""
        hands = self.owner.bench.tap.hands if self.owner.bench is not None else None
        if hands is not None:
            hands.key(not hands.down)
            self.redraw()

    def _do(self, action: object) -> None:
        """Do what a key asks for; where it cannot be, the reason stands among the news."""
        assert callable(action)
        try:
            action()
        except ValueError as error:
            if self._work is not None:
                self._work.say(str(error))
        self._ask()
        self.redraw()

    def _tick(self) -> None:
        if self.owner.bench is None or self._view is None:
            return
        if self._work is None and not self._open():
            return
        assert self._work is not None
        link = self._view.snapshot.link
        self._work.tick(*(("", True) if link is None else (link.words, link.phase in ("open", "silent"))))
        run = self._work.run
        if run is not None and run.must_lift != self._rung:
            self._rung = run.must_lift
            if self._rung:
                self.owner.bell()
        self._ask()
        if self.is_current:
            self.redraw()

    def _open(self) -> bool:
        """Open the file; an error ends the program, which says it in words."""
        from bridgeio.errors import BridgeIOError

        from ..bench.work import BenchWork

        assert self.owner.bench is not None
        try:
            self._work = BenchWork(self.owner.bench)
        except BridgeIOError as error:
            self.owner.post_message(self.owner.Failed(error))
            return False
        return True

    def _ask(self) -> None:
        """Open the line for what is to be typed now, and close it where nothing is."""
        from ..bench.scene import reading_question

        work, prompt = self._work, self.query_one(Prompt)
        if work is None or not self.is_current:
            return
        if work.queries is not None:
            question = work.queries.question
            if self._asked != question.key or not prompt.display:
                self._asked = question.key
                default = outside(question.default, not self.glyphs.dots)
                prompt.ask(f"{question.label} (Enter: {default}):", "", self._use_answer, self._leave_queries)
        elif work.run is not None and work.run.wants_reading and not self._left_reading:
            if self._asked != "reading" or not prompt.display:
                self._asked = "reading"
                question_text, proposed = reading_question(work.run)
                prompt.ask(f"{question_text} (Enter: {proposed}):", "", self._use_reading, self._leave_reading)
        elif self._asked:
            self._asked, self._left_reading = "", self._left_reading and work.run is not None and work.run.wants_reading
            prompt.withdraw()

    def _use_answer(self, text: str) -> None:
        if self._work is not None and self._work.queries is not None:
            self._work.queries.answer(text)
            self._ask()
            self.redraw()

    def _use_reading(self, text: str) -> None:
        from ..bench.scene import reading_question

        if self._work is not None and self._work.run is not None:
            self._work.run.answer(text.strip() or reading_question(self._work.run)[1])

    def _leave_reading(self) -> None:
        self._left_reading = True

    def _leave_queries(self) -> None:
        if self._work is not None:
            self._work.leave_queries()

    def _status(self, view: View, width: int) -> Row:
        """Bridge, frequency, link and key; the key as the counts show it, by the sheet's own dark step."""
        if self._work is None:
            return draw_status(view.snapshot, view.key, view.limits, width, self.glyphs)
        from ..bench.scene import status_of

        snapshot, key = status_of(self._work, view.snapshot)
        return draw_status(snapshot, key, view.limits, width, self.glyphs)

    def _body(self, width: int, height: int) -> list[Row]:
        from ..drawing.bench import draw_asking, draw_bench

        if self.owner.bench is None:
            return [Line(width).row(), *(Line(width).put(0, text).row() for text in _NO_FILE)]
        if self._work is None:
            return [Line(width).row(), Line(width).put(0, "the file is being opened", "quiet").row()]
        from ..bench.scene import asking_of, scene_of

        asking = asking_of(self._work)
        if asking is not None:
            return draw_asking(asking, width, height, self.glyphs)
        return draw_bench(scene_of(self._work), width, height, self.glyphs)
