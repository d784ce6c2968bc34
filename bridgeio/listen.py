"""Which port has a bridge on it, at which rate: listen, rate after rate, for a nameplate or plausible lines.

One rule: a port is opened once and only its rate is changed, for every opening may reset the board.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Protocol

from bridgeio.frames import Item, Nameplate, Tallies
from bridgeio.ports import DeviceSource, Source
from bridgeio.receiver import Receiver

__all__ = ["STANDARD_RATES", "Heard", "Listenable", "listen"]

#: In the order tried: the default, then what sketches use most.
STANDARD_RATES = (115200, 9600, 57600, 38400, 19200, 230400, 250000, 460800, 500000, 921600, 1000000)

SECONDS = 3.0  # a nameplate comes every 2 s; a board that resets on opening needs up to 3 s
ENOUGH_FRAMES = 2  # one frame alone never decides
ENOUGH_LINES = 5
SILENT_RATES = 2  # a line that is silent at two rates is silent at all: a wrong rate shows as rubbish


class Listenable(Source, Protocol):
    """A source whose rate can be changed while it is open."""

    def set_baud(self, baud: int) -> None:
        """Change the rate."""


@dataclass(frozen=True, slots=True)
class Heard:
    """What a port said: `baud` is None where nothing on it is a bridge; `words` say what it was."""

    port: str
    baud: int | None
    words: str
    nameplate: Nameplate | None = None


def listen(
    port: str,
    rates: Sequence[int] = STANDARD_RATES,
    seconds: float = SECONDS,
    on_rate: Callable[[str, int], None] = lambda port, baud: None,
    open_port: Callable[[str, int], Listenable] = DeviceSource,
) -> Heard:
    """Listen at `rates` in turn, `seconds` [s] each at most, and stop at the first that answers.

    `on_rate` is told before each. LinkError where the port does not open, or goes.
    """
    source = open_port(port, rates[0])
    source.open()
    try:
        return _rate_after_rate(source, rates, seconds, on_rate)
    finally:
        source.close()


def _rate_after_rate(
    source: Listenable, rates: Sequence[int], seconds: float, on_rate: Callable[[str, int], None]
) -> Heard:
    heard_bytes = 0
    for number, baud in enumerate(rates):
        if number:
            source.set_baud(baud)
        on_rate(source.name, baud)
        evidence = _Evidence()
        evidence.gather(source, seconds)
        words = evidence.words()
        if words:
            return Heard(source.name, baud, words, evidence.nameplate)
        heard_bytes += evidence.bytes
        if number + 1 >= SILENT_RATES and not heard_bytes:
            return Heard(source.name, None, "silent")
    if heard_bytes:
        return Heard(source.name, None, "something talks, but no rate makes frames or lines of two numbers of it")
    return Heard(source.name, None, "silent")


class _Evidence:
    """What came at one rate, and whether it is enough to believe in a bridge."""

    def __init__(self) -> None:
        self.bytes = self._frames = self._lines = 0
        self.nameplate: Nameplate | None = None
        self._receiver = Receiver()

    def gather(self, source: Source, seconds: float) -> None:
        """Read until a nameplate has come, or the time is over."""
        until_s = time.monotonic() + seconds
        while self.nameplate is None and time.monotonic() < until_s:
            data = source.read()
            self.bytes += len(data)
            for item in self._receiver.feed(data):
                self._weigh(item)

    def words(self) -> str:
        """Say what answers; empty where nothing is plausible."""
        if self.nameplate is not None:
            return "nameplate"
        if self._frames >= ENOUGH_FRAMES:
            return "frames, but no nameplate"
        if self._lines >= ENOUGH_LINES and self._receiver.counters.bad_lines * 4 <= self._lines:
            return "plain lines of two numbers"
        return ""

    def _weigh(self, item: Item) -> None:
        if isinstance(item, Nameplate):
            self.nameplate = item
        elif isinstance(item, Tallies):
            self._frames += len(item) if item.checked else 0
            self._lines += 0 if item.checked else len(item)
        else:
            self._frames += 1
