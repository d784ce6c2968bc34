"""`ports`: what is plugged in, and with `--listen` which of it is a bridge, at which rate.

One rule: a list for people; every name and word from outside goes through the door.
"""

from __future__ import annotations

import argparse
import sys
from typing import TYPE_CHECKING

from tui.door import say, visible

if TYPE_CHECKING:
    from bridgeio.listen import Heard
    from bridgeio.plugged import Port

__all__ = ["EXAMPLE", "add_arguments", "run"]

EXAMPLE = "bridgewright ports"

#: Exit code where ports were listened to and no bridge was heard.
NOBODY = 4


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Options of `ports`."""
    parser.add_argument(
        "--listen",
        nargs="*",
        metavar="PATH",
        help="listen on these ports, or on all that are plugged in, at the standard rates (3 s each)",
    )


def run(args: argparse.Namespace) -> int:
    """List ports, or listen on them; 0, or 4 where nothing that was listened to is a bridge."""
    from bridgeio.plugged import list_ports

    if args.listen:
        return _listen(args.listen)
    ports = list_ports()
    if not ports:
        say(_NOTHING, sys.stdout)
        return 0 if args.listen is None else NOBODY
    if args.listen is None:
        say(_table(ports), sys.stdout)
        return 0
    return _listen([port.device for port in ports])


def _table(ports: list[Port]) -> str:
    width = max(len(visible(port.device)) for port in ports)
    return "\n".join(f"{visible(port.device):{width}}  {_description(port)}".rstrip() for port in ports)


def _description(port: Port) -> str:
    number = f" (serial number {port.serial_number})" if port.serial_number else ""
    return visible(f"{port.description}{number}")


def _listen(paths: list[str]) -> int:
    heard = [_hear(path) for path in paths]
    if not any(heard):
        say(_UNHEARD, sys.stdout)
    return 0 if any(heard) else NOBODY


def _hear(path: str) -> bool:
    """Listen on one port and say what it said; a port that does not open is said so and passed over."""
    from bridgeio.errors import LinkError
    from bridgeio.listen import listen

    try:
        heard = listen(path, on_rate=_progress)
    except LinkError as error:
        say(visible(str(error)), sys.stdout)
        return False
    say(_sentence(heard), sys.stdout)
    return heard.baud is not None


def _progress(port: str, baud: int) -> None:
    say(visible(f"listening on {port} at {baud}"))


def _sentence(heard: Heard) -> str:
    rate = f" at {heard.baud}" if heard.baud else ""
    plate = heard.nameplate
    if plate is None:
        return visible(f"{heard.port}{rate}: {heard.words}")
    pace = f", a tally every {plate.period_ms} ms" if plate.period_ms else ""
    board = f"device id {plate.device_id:08X}" if plate.device_id else "no device id"
    return visible(f"{heard.port}{rate}: {heard.words} of {plate.name or 'a bridge without a name'}, {board}{pace}")


_NOTHING = """no serial port is plugged in
- is the cable one that carries data, and is the board powered?
- a port under another path can be given as it is: bridgewright watch /dev/serial/by-id/...
- without hardware: bridgewright watch sim:"""

_UNHEARD = """no bridge was heard
- is the bridge powered, and its transmit line wired to this port's receive line?
- a bridge with a rate of its own: bridgewright watch PATH --baud RATE
- lines with more than two numbers need --pattern"""
