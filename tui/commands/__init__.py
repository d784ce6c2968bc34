"""The commands, as one table.

One rule: only the module of the command asked for is imported, so that `--version` and `--help` cost nothing. A module
has `add_arguments(parser)`, `run(args) -> exit code` and `EXAMPLE`, a line that works without hardware.
"""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["COMMANDS", "Command"]


@dataclass(frozen=True, slots=True)
class Command:
    """A command: its name, one line of help, and the module that does it."""

    name: str
    help: str
    module: str


COMMANDS: dict[str, Command] = {
    command.name: command
    for command in (
        Command("watch", "the live screen: tune up by it", "tui.commands.watch"),
        Command("stream", "readings as JSON lines or CSV on standard output", "tui.commands.stream"),
        Command("keep", "an unattended journal of what the bridge sends", "tui.commands.keep"),
        Command("export", "a journal as readings, JSON lines or CSV", "tui.commands.export"),
        Command("report", "what a journal or a bridge file holds, and what it lacks", "tui.commands.report"),
        Command("fit", "fit a bench sheet: from measured steps to a calibrated bridge", "tui.commands.fit"),
        Command("verify", "judge a bridge file by known loads it was not fitted on", "tui.commands.verify"),
        Command("ports", "what is plugged in; with --listen, which port is a bridge", "tui.commands.ports"),
        Command(
            "firmware", "write the firmware kit (C encoder, example, make file) to a folder", "tui.commands.firmware"
        ),
    )
}
