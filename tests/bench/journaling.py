"""The whole chain with a journal: bytes of a port to a record on the disk and to lines of JSON on standard output.

One rule: it is put together from the parts that the commands use, and the record comes first.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Sequence
from contextlib import suppress

from bridgeio.desk import Desk, Reading
from bridgeio.frames import Item
from bridgeio.journal import Stretch, Writer
from bridgeio.link import Link
from bridgeio.ports import DeviceSource
from bridgeio.receiver import Receiver
from bridgeio.rows import FORMATS
from tests.bench import counts

__all__ = ["main"]

#: As `stream` rests where several readings come at once [s].
_GATHERING_S = 0.1


def main() -> None:
    """Print readings from the port named by the first argument until stopped, and keep a journal at the second."""
    path, journal = sys.argv[1:]
    receiver = Receiver()
    desk = Desk([counts.file()], Reading(frequency_hz=counts.FREQUENCY_HZ))
    text = counts.BRIDGE_FILE.read_text(encoding="utf-8")
    writer = Writer(journal, Stretch(path, int(time.time() * 1e6), bridge_file=text))

    def take(items: Sequence[Item], arrival_s: float) -> None:
        writer.put(items, arrival_s, receiver.counters.copy())
        for batch in desk.take(items, arrival_s):
            sys.stdout.write("".join(f"{row}\n" for row in FORMATS["jsonl"](batch, desk.bridge_name)))
        sys.stdout.flush()

    link = Link(DeviceSource(path), receiver, take, lambda state: None, on_reopened=desk.reopened)
    link.rest_s = _GATHERING_S
    try:
        with suppress(KeyboardInterrupt):
            link.run()
    finally:
        writer.stop()


if __name__ == "__main__":
    main()
