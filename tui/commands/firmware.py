"""`bridgewright firmware`: the firmware kit, written to a folder.

One rule: it says what it wrote on standard output, a path a line, and what comes next on standard error.
"""

from __future__ import annotations

import argparse

__all__ = ["EXAMPLE", "add_arguments", "run"]

EXAMPLE = "bridgewright firmware my-bridge"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add firmware's options."""
    parser.add_argument("folder", metavar="DIR", help="folder to write to; made if it is not there")
    parser.add_argument("--force", action="store_true", help="overwrite files there that differ from the kit's")


def run(args: argparse.Namespace) -> int:
    """Write the kit and say what was written."""
    import sys

    from bridgeio.firmware_kit import KIT_FILES, write_kit
    from tui.door import say

    written = write_kit(args.folder, args.force)
    for path in written:
        say(str(path), sys.stdout)
    kept = len(KIT_FILES) - len(written)
    if kept:
        say(f"{kept} {'file was' if kept == 1 else 'files were'} there already, as in the kit")
    say(f"next: read {args.folder}/README.md, edit board.h, then: make size")
    return 0
