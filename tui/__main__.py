"""The command line: finds the command, runs it, and turns errors into words and exit codes.

One rule: nothing heavy is imported here; `--version` and `--help` must answer at once.
Exit codes: 0 done, 2 usage, 3 a file is wrong, 4 the port or link failed, 5 the data cannot carry what was asked.
"""

from __future__ import annotations

import argparse
import difflib
import importlib
import os
import sys
from collections.abc import Sequence

from calibration import __version__
from calibration.errors import CalibrationError, UnitError
from tui.commands import COMMANDS
from tui.door import say, visible

__all__ = ["main"]

DONE, USAGE, FILE_WRONG, LINK_FAILED, DATA_SHORT = 0, 2, 3, 4, 5


def main(argv: Sequence[str] | None = None) -> int:
    """Run the command line `argv` (sys.argv unless given) and return the exit code."""
    words = list(sys.argv[1:] if argv is None else argv)
    try:
        return _run(words)
    except BrokenPipeError:
        # The reader of our output has left (`| head`): done. Python would complain again when it flushes at exit.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return DONE
    except KeyboardInterrupt:
        return 130
    except UnitError as error:
        say(f"bridgewright: {error}")
        return USAGE
    except CalibrationError as error:
        say(f"bridgewright: {error}")
        return DATA_SHORT


def _run(words: list[str]) -> int:
    if words[:1] == ["--version"]:
        print(f"bridgewright {__version__}")
        return DONE
    if words[:1] in (["--help"], ["-h"]):
        print(_overview())
        return DONE
    name, rest = _command_of(words)
    if name not in COMMANDS:
        near = difflib.get_close_matches(name, COMMANDS, n=1)
        hint = f"; did you mean {near[0]}?" if near else ""
        say(f"bridgewright: unknown command {name!r}{hint}; known: {', '.join(COMMANDS)}")
        return USAGE
    module = importlib.import_module(COMMANDS[name].module)
    args = _parser(name, module).parse_args(rest)
    return _answering_for_files(module, args)


def _command_of(words: list[str]) -> tuple[str, list[str]]:
    """The command and its words. A bare line, an option or a source first is `watch`."""
    if not words:
        return "watch", []
    first = words[0]
    if first in COMMANDS:
        return first, words[1:]
    if first.startswith("-") or ":" in first or "/" in first or os.path.exists(first):
        return "watch", words
    return first, words[1:]


def _answering_for_files(module: object, args: argparse.Namespace) -> int:
    # Imported here: bridgeio's errors cost nothing, but keep the start free of it all the same.
    from bridgeio.errors import FileError, LinkError

    try:
        return int(module.run(args))  # type: ignore[attr-defined]
    except FileError as error:
        say(f"bridgewright: {error}")
        return FILE_WRONG
    except LinkError as error:
        say(f"bridgewright: {error}")
        return LINK_FAILED


class _Parser(argparse.ArgumentParser):
    """argparse whose errors pass the door: they echo what was typed."""

    def error(self, message: str) -> None:  # type: ignore[override]
        say(f"{self.prog}: {message}\ntry: {self.prog} --help")
        raise SystemExit(USAGE)


def _parser(name: str, module: object) -> argparse.ArgumentParser:
    parser = _Parser(
        prog=f"bridgewright {name}",
        description=COMMANDS[name].help,
        epilog=f"example: {module.EXAMPLE}",  # type: ignore[attr-defined]
        allow_abbrev=False,
    )
    module.add_arguments(parser)  # type: ignore[attr-defined]
    return parser


def _overview() -> str:
    width = max(map(len, COMMANDS))
    lines = ["usage: bridgewright [COMMAND] [SOURCE] [OPTIONS]", "", "The host program for a homebuilt SWR bridge.", ""]
    lines += [f"  {command.name:<{width}}  {visible(command.help)}" for command in COMMANDS.values()]
    lines += [
        "",
        "Without a command: watch. SOURCE is a device path, file:PATH (- is standard input) or sim:, the simulated",
    ]
    lines += ["bridge, which is what watch and stream use unless told. `bridgewright COMMAND --help` says more."]
    lines += ["", "example: bridgewright stream sim: --count 5"]
    return "\n".join(lines)


if __name__ == "__main__":
    sys.exit(main())
