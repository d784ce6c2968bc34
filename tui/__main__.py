"""The command line: finds the command, runs it, and turns errors into words and exit codes.

One rule: nothing heavy is imported here; `--version` and `--help` must answer at once.
Exit codes: 0 done, 2 usage, 3 a file is wrong, 4 the port or link failed, 5 the data cannot carry what was asked,
6 another program holds the journal, 130 stopped by Ctrl-C.
"""

from __future__ import annotations

import argparse
import difflib
import importlib
import io
import os
import sys
from collections.abc import Sequence

from calibration import __version__
from calibration.errors import CalibrationError, UnitError
from tui.commands import COMMANDS
from tui.door import say, visible

__all__ = ["main"]

DONE, USAGE, FILE_WRONG, LINK_FAILED, DATA_SHORT, JOURNAL_HELD, STOPPED = 0, 2, 3, 4, 5, 6, 130


def main(argv: Sequence[str] | None = None) -> int:
    """Run the command line `argv` (sys.argv unless given) and return the exit code."""
    # Matrices are small here: more than one thread only makes them wait for each other. Numpy asks when it is loaded.
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    words = list(sys.argv[1:] if argv is None else argv)
    for name in ("stdout", "stderr"):
        _settle_output(name)
    try:
        code = _run(words)
        sys.stdout.flush()
        return code
    except BrokenPipeError:  # the reader of our output has left (`| head`): done
        _abandon_output()
        return DONE
    except OSError as error:  # ports and files have their own words: this is standard output, on a full disk
        _abandon_output()
        say(f"bridgewright: cannot go on: {error.strerror or error}")
        return FILE_WRONG
    except KeyboardInterrupt:
        return STOPPED
    except UnitError as error:
        return _told(error, USAGE)
    except CalibrationError as error:
        return _told(error, DATA_SHORT)


def _told(error: Exception, code: int) -> int:
    """Say what an error says, a line for each of its arguments, whatever they hold; returns `code`."""
    for words in error.args:
        say(visible(f"bridgewright: {words}"))
    return code


def _settle_output(name: str) -> None:
    """Let the stream `name` of sys take any text: where it is closed nobody is there to read, which is no fault."""
    stream = getattr(sys, name)
    if stream is None:
        setattr(sys, name, open(os.devnull, "w", encoding="utf-8"))  # noqa: SIM115 - open until we leave
    elif isinstance(stream, io.TextIOWrapper):  # a name may hold what the encoding of this terminal does not
        stream.reconfigure(errors="backslashreplace")


def _abandon_output() -> None:
    """Write nothing more: Python would fail again when it flushes at exit, and say so."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


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
        hint = f"did you mean {near[0]}? " if near else ""
        say(f"bridgewright: there is no command {name!r}; {hint}known: {', '.join(COMMANDS)}")
        return USAGE
    module = importlib.import_module(COMMANDS[name].module)
    try:
        args = _parser(name, module).parse_args(rest)
    except SystemExit as leaving:  # --help, or a word that the parser has refused
        return int(leaving.code or DONE)
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
    from bridgeio.errors import BridgeIOError, FileError, JournalHeld, LinkError

    try:
        return int(module.run(args))  # type: ignore[attr-defined]
    except FileError as error:
        return _told(error, FILE_WRONG)
    except LinkError as error:
        return _told(error, LINK_FAILED)
    except JournalHeld as error:
        return _told(error, JOURNAL_HELD)
    except BridgeIOError as error:  # what is left is a pattern that cannot be used: a word of the command line
        return _told(error, USAGE)


class _Parser(argparse.ArgumentParser):
    """argparse whose errors pass the door: they echo what was typed."""

    def error(self, message: str) -> None:  # type: ignore[override]
        say(f"{visible(f'{self.prog}: {message}')}\ntry: {self.prog} --help")
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
