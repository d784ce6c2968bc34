"""The screen program: joins a feed, the mailbox, the alarms and the screens.

One rule: nothing waits. The first picture comes before the feed starts, a reading is painted as it arrives, and
whether it is still alive is judged by a clock of our own, because a dead link sends nothing to notice.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any, ClassVar

from textual.app import App
from textual.binding import Binding, BindingType
from textual.message import Message

from .alarm import Alarm, AlarmState, KeyClock, Limits
from .bench.tap import BenchSetting
from .drawing.glyphs import glyphs
from .drawing.journal import journal_trouble
from .mailbox import Delivery, Mailbox
from .messages import Feed, Snapshot, View
from .pace import Pace, stale_after_s
from .palette import palette
from .sample import Sample, Sampler
from .screens import SCREENS, LiveScreen
from .screens.help import Help
from .themes import THEMES, no_color
from .trail import Trail

__all__ = ["BridgewrightApp"]

_PAINTS_PER_READING = 1.5  # the cap on paints lies above the feed's rate, so that jitter delays none,
_LASTING_PAINTS = 1.1  # and in the long run just above it, so that a faster feed costs hardly more
_TICK_S = 0.25  # clocks and the ageing trail move on without readings
_FIRST_READING_S = 3.0  # before the first reading, silence is not yet a fault: boards reset when the port opens
_SAME_FREQUENCY = 1e-3  # a smaller change does not begin a new tune-up


class BridgewrightApp(App[None]):
    """Shows the live screens. `feed` is started after the first paint and stopped at the end."""

    CSS_PATH = Path(__file__).with_name("app.tcss")
    TITLE = "bridgewright"
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("q,ctrl+c", "quit", "quit"),
        Binding("question_mark", "help", "help"),
        Binding("d", "toggle_dark", "dark/light"),
        Binding("s", "next_screen", "screens"),
    ]

    class Woken(Message):
        """Something waits in the mailbox."""

    class Failed(Message):
        """The feed could not start."""

        def __init__(self, error: Exception) -> None:
            """`error` is what its start raised."""
            super().__init__()
            self.error = error

    def __init__(
        self,
        feed: Feed,
        *,
        screen: str = "tune-up",
        ascii: bool = False,
        color: bool = True,
        limits: Limits | None = None,
        rate_hz: float = 20.0,
        live_dark: bool = False,
        bench: BenchSetting | None = None,
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        """`rate_hz` [Hz] is the rate at which the feed sends readings; `clock` [s] must be steady. bench: its file."""
        with no_color(not color):
            super().__init__(ansi_color=None if color else True)
        self._feed, self._clock, self._color = feed, clock, color
        self._shown, self._screens = screen, dict[str, LiveScreen]()
        self.glyphs = glyphs(ascii)
        self.limits = limits or Limits()
        self.bench = bench
        least_s, mean_s = (1.0 / (paints * rate_hz) for paints in (_PAINTS_PER_READING, _LASTING_PAINTS))
        self.mailbox = Mailbox(self._wake, least_s, clock, mean_s)
        self._snapshot = Snapshot()
        self._alarm, self._key_clock, self._trail = Alarm(self.limits), KeyClock(), Trail()
        self._sampler, self._pace = Sampler(), Pace()
        self._last: Sample | None = None
        self._rung: frozenset[str] = frozenset()
        self._heard_s = clock()
        self._stopped = False
        self._failure: Exception | None = None
        self._watching = False
        self._live_dark = live_dark
        self.use_command_palette = not ascii  # it draws pictures

    def get_default_screen(self) -> LiveScreen:
        """The screen asked for lies at the bottom of the stack."""
        return self._screen_named(self._shown)

    def show_screen(self, name: str) -> None:
        """Show the screen of that name in SCREENS; each is made once and keeps what it has."""
        if isinstance(self.screen, LiveScreen):
            self._shown, screen = name, self._screen_named(name)
            if len(self.screen_stack) > 1:  # one at most lies upon the first, which the library never lets go
                self.pop_screen()
            if screen is not self.screen:
                self.push_screen(screen)

    def repaint(self) -> None:
        """Show the present moment on the screen on top, in the colours in force."""
        for screen in self.screen_stack[-1:]:
            if isinstance(screen, LiveScreen):
                screen.dress(palette(self._color, self.current_theme.dark))
        self._paint()

    def _screen_named(self, name: str) -> LiveScreen:
        if name not in self._screens:
            screen = self._screens[name] = SCREENS[name]()
            screen.glyphs, screen.palette = self.glyphs, palette(self._color, dark=self.current_theme.dark)
            screen.first = self._view()
            self.install_screen(screen, name)  # else the library ends it when another takes its place
        return self._screens[name]

    def on_mount(self) -> None:
        """Set the colours; nothing else is loaded yet."""
        for theme in THEMES:
            self.register_theme(theme)
        self.theme = THEMES[0 if self._color else 2].name

    def on_ready(self) -> None:
        """Paint the first picture; only when it stands start the feed, whose imports would delay it."""
        self._heard_s = self._clock()
        self._paint()
        self.set_interval(_TICK_S, self._tick)
        feed = threading.Thread(target=self._start_feed, name="feed-start", daemon=True)
        self.call_after_refresh(feed.start)

    async def run_async(self, **options: Any) -> None:
        """Run until the end; the feed is stopped when the terminal is already back to normal.

        What kept the feed from starting is raised here, for the command line to put into words.
        """
        try:
            await super().run_async(**options)
        finally:
            self.stop_feed()
        if self._failure is not None:
            raise self._failure

    def stop_feed(self) -> None:
        """Stop the feed, once."""
        if not self._stopped:
            self._stopped = True
            self._feed.stop()

    def set_frequency(self, hz: float) -> None:
        """Read at this frequency [Hz] from now on."""
        self._feed.set_frequency(hz)

    def toggle_zero(self) -> None:
        """Read with the running dark count as zero, or with the calibration's again."""
        self._live_dark = not self._live_dark
        self._feed.use_live_dark(self._live_dark)

    def set_limits(self, limits: Limits) -> None:
        """Use other limits from now on."""
        self.limits = limits
        self._alarm.set_limits(limits)
        self._paint()

    def action_toggle_dark(self) -> None:
        """Dark to light and back."""
        if self._color:
            self.theme = THEMES[1 if self.current_theme.dark else 0].name

    def action_next_screen(self) -> None:
        """The next screen of SCREENS, after the last one the first; the bench only where one is open."""
        names = [name for name in SCREENS if name != "bench" or self.bench or name == self._shown]
        self.show_screen(names[(names.index(self._shown) + 1) % len(names)])

    def action_help(self) -> None:
        """Keys, symbols, words and cautions."""
        if not isinstance(self.screen, Help):
            self.push_screen(Help(not self.glyphs.dots))

    def on_bridgewright_app_failed(self, message: Failed) -> None:
        """End; the error is raised when the terminal is back to normal."""
        self._failure = message.error
        self.exit()

    def on_bridgewright_app_woken(self) -> None:
        """Paint at once, or at the deadline where the last paint is too short ago."""
        wait_s = self.mailbox.wait_s()
        if wait_s <= 0.0:
            self._collect()
        else:
            self.set_timer(wait_s, self._collect)

    def _start_feed(self) -> None:
        """In a thread of its own: files and ports may take their time, the keys answer all the same."""
        try:
            self._feed.start(self.mailbox.put)
        except Exception as error:  # noqa: BLE001  handed on to `run_async`, which raises it
            self.post_message(self.Failed(error))

    def _wake(self) -> None:
        self.post_message(self.Woken())

    def _collect(self) -> None:
        """Take what waits, judge every reading of it, paint the newest."""
        delivery = self.mailbox.take()
        if delivery is None:
            return
        self._take_in(delivery)
        self._paint()

    def _take_in(self, delivery: Delivery) -> None:
        before, self._snapshot = self._snapshot, delivery.snapshot
        if _moved(before.frequency_hz, delivery.snapshot.frequency_hz):
            self._trail.forget()
        for at_s, batch in delivery.readings:
            self._pace.feed(at_s, len(batch.flags))
            for sample in self._sampler.samples(at_s, batch):
                self._last = sample
                for listener in (self._alarm, self._key_clock, self._trail):
                    listener.feed(sample)
        if delivery.readings and self._last is not None:
            self._heard_s = self._last.at_s
            if not self._watching:
                self._watch_silence()

    def _watch_silence(self) -> None:
        """Paint when the newest reading has just become old; one timer, set anew only when it has run out."""
        left_s = self._heard_s + self._lasting_s - self._clock()
        self._watching = left_s > 0.0
        if self._watching:
            self.set_timer(left_s, self._watch_silence)
        else:
            self._paint()

    def _tick(self) -> None:
        """Move clocks on while no reading does it."""
        if self._clock() - self._heard_s >= _TICK_S:
            self._paint()

    @property
    def _lasting_s(self) -> float:
        """Age [s] from which the newest reading is stale."""
        return stale_after_s(self._snapshot.period_ms, self._pace.spacing_s)

    def _silent(self) -> bool:
        silent_s = self._clock() - self._heard_s
        if self._snapshot.reading is None:
            return silent_s > _FIRST_READING_S
        return silent_s >= self._lasting_s

    def _paint(self) -> None:
        """Show the present moment on the screen on top."""
        view = self._view()
        if view.stale:
            self._alarm.lapse()
        self._ring(frozenset((*view.alarm.over, *journal_trouble(view.snapshot.journal))))
        for screen in self.screen_stack[-1:]:  # none is left while the program ends
            if isinstance(screen, LiveScreen) and screen.is_mounted:  # one that is being made paints itself
                screen.paint(view)

    def _view(self) -> View:
        now_s, silent = self._clock(), self._silent()
        stale = silent or (self._last is not None and "stale" in self._last.flags)
        key = self._key_clock.state(now_s, stale)
        alarm = self._alarm.state(self._last, self._snapshot.reading, stale)
        limit_s = self.limits.key_down_s
        if key.down and limit_s is not None and key.seconds > limit_s:
            alarm = AlarmState((*alarm.over, "key down"), alarm.may, alarm.blind)
        return View(
            snapshot=self._snapshot,
            now_s=now_s,
            silent_s=now_s - self._heard_s,
            silent=silent,
            stale=stale,
            alarm=alarm,
            limits=self.limits,
            key=key,
            trail=self._trail,
            lasting_s=self._lasting_s,
        )

    def _ring(self, over: frozenset[str]) -> None:
        """One bell for each limit that is newly passed, and for a journal that newly is in trouble."""
        if over - self._rung:
            self.bell()
        self._rung = over

    def watch_theme(self) -> None:
        """Dress the screens in the colours of the theme."""
        for screen in self.screen_stack:
            if isinstance(screen, LiveScreen):
                screen.dress(palette(self._color, self.current_theme.dark))
                screen.redraw()


def _moved(before_hz: float | None, after_hz: float | None) -> bool:
    """Whether the frequency is another one, so that the best point means nothing any more."""
    if before_hz is None or after_hz is None:
        return False
    return abs(after_hz - before_hz) > _SAME_FREQUENCY * before_hz
