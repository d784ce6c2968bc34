"""`bridgewright watch`: the live screen, or sentences where a screen cannot be.

One rule: the first picture comes before numpy, files and ports are touched; what goes wrong there ends the screen and
is said in words.
"""

from __future__ import annotations

import argparse
import gc
import os
import sys
import time
from collections.abc import Callable
from typing import TYPE_CHECKING

from tui.commands.options import add_reading_options, add_source_options, positive

if TYPE_CHECKING:
    from bridgeio.desk import Desk
    from bridgeio.link import LinkState
    from bridgeio.ports import Source
    from bridgeio.receiver import Receiver
    from tui.alarm import Limits
    from tui.bench.tap import BenchSetting
    from tui.live_feed import Keeping
    from tui.messages import Feed, Snapshot

__all__ = ["EXAMPLE", "add_arguments", "run"]

EXAMPLE = "bridgewright watch sim:"

_SCREEN_HZ, _PLAIN_HZ = 20.0, 1.0


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add watch's options."""
    add_source_options(parser)
    add_reading_options(parser)
    parser.add_argument("--plain", action="store_true", help="one sentence a line instead of a screen")
    parser.add_argument(
        "--rate", type=positive, metavar="HZ", help="paints a second on the screen (20), sentences with --plain (1)"
    )
    parser.add_argument("--screen", type=_screen, metavar="NAME", help="the screen to begin with (tune-up); key s")
    parser.add_argument(
        "--bench", metavar="FILE", help="calibrate: the Bench screen on this sheet or bridge file, new or to go on with"
    )
    parser.add_argument(
        "--journal", metavar="FILE", help="keep all that comes, as `keep` does; continued if it is there"
    )
    parser.add_argument("--limit-swr", type=positive, metavar="S", help="alarm above this SWR")
    parser.add_argument("--limit-power", type=positive, metavar="W", help="alarm above this forward power")
    parser.add_argument("--limit-key", type=positive, metavar="S", help="alarm after this many seconds of key-down")


def run(args: argparse.Namespace) -> int:
    """Show readings until the user quits or, with --plain, until the source ends."""
    from tui.door import say
    from tui.live_feed import LiveFeed
    from tui.terminal import terminal

    shown_on = terminal(os.environ, sys.stdout.encoding, sys.stdout.isatty() and sys.stdin.isatty())
    if misuse := _misused(args, shown_on.screen and not args.plain):
        say(f"bridgewright watch: {misuse}")
        return 2
    bench = _bench(args)
    feed = LiveFeed(lambda: _prepare(args), _keeping(args), None if bench is None else bench.tap)
    if args.plain or not shown_on.screen:
        return _in_sentences(feed, args.rate or _PLAIN_HZ)
    from tui.app import BridgewrightApp

    app = BridgewrightApp(
        feed,
        screen=args.screen or ("tune-up" if bench is None else "bench"),
        ascii=shown_on.ascii,
        color=shown_on.color,
        limits=_limits(args),
        rate_hz=args.rate or _SCREEN_HZ,
        live_dark=args.dark == "live",
        bench=bench,
    )
    app.run()
    return app.return_code or 0


def _prepare(args: argparse.Namespace) -> tuple[Source, Receiver, Desk]:
    from bridgeio.ports import open_source
    from bridgeio.simulator.source import SimulatedSource
    from tui.commands.reading import desk_for, receiver_for

    source = open_source(args.source, args.baud)
    if args.bench and isinstance(source, SimulatedSource):
        source.at_the_bench()
    made = source, receiver_for(args, source), desk_for(args, source)
    _tame_the_collector()
    return made


def _misused(args: argparse.Namespace, on_a_screen: bool) -> str:
    """What is wrong with how the bench is asked for, "" where nothing is."""
    if args.screen == "bench" and args.bench is None:
        return "--screen bench needs a file: --bench FILE, new or to go on with"
    if args.bench is not None and not on_a_screen:
        return "--bench is a screen; wanted a terminal, and no --plain"
    return ""


def _bench(args: argparse.Namespace) -> BenchSetting | None:
    """What --bench opens."""
    from pathlib import Path

    from tui.bench.tap import BenchSetting

    return None if args.bench is None else BenchSetting(Path(args.bench), simulated=args.source.startswith("sim:"))


def _keeping(args: argparse.Namespace) -> Callable[[Source], Keeping] | None:
    """What the journal needs, asked when the bridge files have been found good; None where none is wanted."""
    if args.journal is None:
        return None

    def keeping(source: Source) -> Keeping:
        from bridgeio.bridge_file import sheet_text
        from tui.commands.reading import bridge_paths
        from tui.live_feed import Keeping

        return Keeping(args.journal, {str(path): sheet_text(path) for path in bridge_paths(args, source)})

    return keeping


def _screen(text: str) -> str:
    """The name of a screen, for argparse."""
    import difflib

    from tui.screens import SCREENS

    if text in SCREENS:
        return text
    near = difflib.get_close_matches(text.lower(), SCREENS, n=1)
    hint = f"did you mean {near[0]}? " if near else ""
    raise argparse.ArgumentTypeError(f"there is no screen {text[:40]!r}; {hint}known: {', '.join(SCREENS)}")


def _tame_the_collector() -> None:
    """All that is loaded stays, so it need not be looked through for garbage again: that stops a screen for 20 ms.

    And what a paint makes is gone at the next one without it: a tenth of the searches will do.
    """
    gc.freeze()
    gc.set_threshold(10 * gc.get_threshold()[0], *gc.get_threshold()[1:])


def _limits(args: argparse.Namespace) -> Limits:
    from tui.alarm import Limits

    return Limits(swr=args.limit_swr, power_w=args.limit_power, key_down_s=args.limit_key)


def _in_sentences(feed: Feed, rate_hz: float) -> int:
    """A sentence at most every 1/rate s, and one for every change of the link, until the link ends."""
    import queue

    waiting: queue.SimpleQueue[Snapshot] = queue.SimpleQueue()
    feed.start(waiting.put)
    teller = _Teller(rate_hz)
    try:
        while not teller.ended:
            teller.tell(waiting.get())
    finally:
        feed.stop()
    return 0


class _Teller:
    """Says what is new in a snapshot: link, journal, note and caution to standard error, readings to output."""

    def __init__(self, rate_hz: float) -> None:
        self._spacing_s, self._due_s = 1.0 / rate_hz, 0.0
        self._phase: str | None = None
        self._note: str | None = None
        self._caution: str | None = None
        self._journal: str | None = None
        self.ended = False

    def tell(self, snapshot: Snapshot) -> None:
        """Say it. LinkError when the link is lost."""
        from tui.door import say
        from tui.plain import line

        if snapshot.note != self._note:
            self._note = snapshot.note
            say(snapshot.note or "readings are calibrated again")
        if snapshot.caution != self._caution:
            self._caution = snapshot.caution
            if snapshot.caution:
                say(snapshot.caution)
        if snapshot.journal is not None and snapshot.journal.phase != self._journal:
            self._journal = snapshot.journal.phase
            say(snapshot.journal.words)
        if snapshot.link is not None:
            self._tell_link(snapshot.link)
        if snapshot.reading is not None and time.monotonic() >= self._due_s:
            self._due_s = time.monotonic() + self._spacing_s
            say(line(snapshot.reading), sys.stdout)
            sys.stdout.flush()

    def _tell_link(self, link: LinkState) -> None:
        from bridgeio.errors import LinkError
        from tui.door import say

        if link.phase == "lost":
            raise LinkError(link.words)
        if link.phase != self._phase:
            self._phase = link.phase
            say(link.words)
        self.ended = link.phase == "ended"
