"""A program that does nothing but receive: the reader thread of the screens on a port, and a count at the end."""

from __future__ import annotations

import sys
import threading

from bridgeio.frames import Item, Tallies
from bridgeio.link import Link, LinkState
from bridgeio.ports import DeviceSource
from bridgeio.receiver import Receiver

__all__ = ["main"]


def main(path: str, wanted: int) -> None:
    """Say when the port at `path` is open, and, when `wanted` tallies have come, how many did."""
    taken, done = 0, threading.Event()

    def take(items: list[Item], _arrival_s: float) -> None:
        nonlocal taken
        taken += sum(len(item) for item in items if isinstance(item, Tallies))
        if taken >= wanted:
            done.set()

    def tell(state: LinkState) -> None:
        print(state.phase, flush=True)

    link = Link(DeviceSource(path), Receiver(), take, tell)
    link.start()
    done.wait()
    print(taken, flush=True)
    threading.Event().wait()  # until it is stopped: its CPU time is still to be read


if __name__ == "__main__":
    try:
        main(sys.argv[1], int(sys.argv[2]))
    except KeyboardInterrupt:
        sys.exit(130)
