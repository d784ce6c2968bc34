"""The command line: what is a command, what leaves with which code, and how little is loaded for it."""

import argparse
import importlib
import os
import subprocess
import sys
from pathlib import Path
from types import SimpleNamespace

import pytest

from bridgeio.errors import FileError, LinkError
from bridgeio.lines import PatternError
from calibration import __version__
from calibration.errors import SheetError, UnitError
from tests import fitted, known_loads, shed
from tui.__main__ import main
from tui.commands import COMMANDS

ROOT = Path(__file__).parents[2]
#: As a user has it: standard output waits in a buffer.
BUFFERED = {name: value for name, value in os.environ.items() if name != "PYTHONUNBUFFERED"}
HEAVY = {"textual", "rich", "numpy", "scipy", "serial", "pydantic", "sqlite3"}


def child(*words, **options):
    """The program in a process of its own, run to its end."""
    return subprocess.run(
        [sys.executable, "-m", "tui", *words],
        cwd=ROOT,
        env=BUFFERED,
        timeout=60,
        check=False,
        **({"capture_output": True, "text": True} | options),
    )


@pytest.fixture
def watched(monkeypatch):
    """A `watch` that does nothing but keep the words that it was asked with."""
    words = []

    def add_arguments(parser):
        parser.add_argument("source", nargs="?", default="sim:")
        parser.add_argument("--frequency")

    def run(args):
        words.append(args)
        return 0

    monkeypatch.setitem(
        sys.modules, "tui.commands.watch", SimpleNamespace(EXAMPLE="", add_arguments=add_arguments, run=run)
    )
    return words


@pytest.fixture
def failing(monkeypatch):
    """Let `stream` fail with an exception."""

    def set_up(error):
        def run(_):
            raise error

        fake = SimpleNamespace(EXAMPLE="", add_arguments=lambda parser: None, run=run)
        monkeypatch.setitem(sys.modules, "tui.commands.stream", fake)

    return set_up


# Answering at once


@pytest.mark.parametrize("words", [["--version"], ["--help"], *([name, "--help"] for name in COMMANDS)], ids=" ".join)
def test_nothing_heavy_is_loaded_to_answer(words):
    """Version and help load no screen, no arrays, no ports and no models."""
    done = subprocess.run(
        [sys.executable, "-X", "importtime", "-m", "tui", *words],
        cwd=ROOT,
        capture_output=True,
        text=True,
        timeout=60,
        check=True,
    )
    loaded = {line.split("|")[-1].strip().split(".")[0] for line in done.stderr.splitlines() if "|" in line}
    assert "tui" in loaded
    assert not loaded & HEAVY
    assert done.stdout


def test_version_is_told(capsys):
    """`--version` tells the program's name and version."""
    assert main(["--version"]) == 0
    assert capsys.readouterr().out == f"bridgewright {__version__}\n"


@pytest.mark.parametrize("word", ["--help", "-h"])
def test_help_names_every_command(capsys, word):
    """The overview has a line for each command, and an example."""
    assert main([word]) == 0
    out = capsys.readouterr().out
    for command in COMMANDS.values():
        assert f"  {command.name} " in out
        assert command.help in out
    assert "example: bridgewright stream sim: --count 5" in out


# Every command


@pytest.mark.parametrize("name", COMMANDS)
def test_command_has_what_a_command_has(name, capsys):
    """It can be asked for help, adds its arguments, and its help ends with its example, which is its own."""
    module = importlib.import_module(COMMANDS[name].module)
    module.add_arguments(argparse.ArgumentParser())
    assert callable(module.run)
    assert module.EXAMPLE.startswith(f"bridgewright {name}")
    assert COMMANDS[name].help
    assert main([name, "--help"]) == 0
    assert f"example: {module.EXAMPLE}" in " ".join(capsys.readouterr().out.split())


@pytest.mark.parametrize("name", sorted(set(COMMANDS) - {"watch"}))
def test_example_runs(name, tmp_path, monkeypatch, capsys):
    """The example of a command's help runs as it stands, in a folder with a bench sheet, fit, steps and journal."""
    sheet = (shed.FOLDER / "shed12.bench.toml").read_text(encoding="utf-8")
    (tmp_path / "shed.bench.toml").write_text(sheet, encoding="utf-8")
    (tmp_path / "shed.bridge.toml").write_text(fitted.bridge_text(12), encoding="utf-8")
    (tmp_path / "second.bench.toml").write_text(known_loads.sheet_text(known_loads.load_steps()), encoding="utf-8")
    monkeypatch.chdir(tmp_path)
    if name in ("export", "report"):
        assert main(["keep", "sim:duration=2&pace=fast", "try.journal"]) == 0
        capsys.readouterr()
    monkeypatch.setattr("calibration.fit.fit", lambda *_, **__: shed.fitted(12))
    program, *words = importlib.import_module(COMMANDS[name].module).EXAMPLE.split()
    assert program == "bridgewright"
    assert main(words) == 0
    assert capsys.readouterr().out


# Which command


@pytest.mark.parametrize(
    ("words", "source", "frequency"),
    [
        ([], "sim:", None),
        (["sim:power=5"], "sim:power=5", None),
        (["/dev/ttyUSB0"], "/dev/ttyUSB0", None),
        (["--frequency", "20m"], "sim:", "20m"),
        (["file:x", "--frequency", "20m"], "file:x", "20m"),
        (["watch", "COM3"], "COM3", None),
        (["here"], "here", None),
    ],
)
def test_line_without_a_command_is_watch(watched, tmp_path, monkeypatch, words, source, frequency):
    """A bare line, an option or a source first is `watch`; so is a word that is an existing path."""
    (tmp_path / "here").touch()
    monkeypatch.chdir(tmp_path)
    assert main(words) == 0
    assert (watched[0].source, watched[0].frequency) == (source, frequency)


@pytest.mark.parametrize(
    ("word", "said"),
    [
        ("strem", "there is no command 'strem'; did you mean stream? known: watch, stream, "),
        ("fitt", "there is no command 'fitt'; did you mean fit? known: "),
        ("quantum", "there is no command 'quantum'; known: watch, stream, "),
        ("\x1b[2J", "there is no command '\\x1b[2J'; known: "),
    ],
)
def test_unknown_command_is_usage(capsys, word, said):
    """A word that is no command is refused with the near miss and all that are known."""
    assert main([word]) == 2
    assert capsys.readouterr().err.startswith(f"bridgewright: {said}")


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["fit"], "bridgewright fit: the following arguments are required: FILE"),
        (["stream", "sim:", "--formt", "csv"], "bridgewright stream: unrecognized arguments: --formt csv"),
        (["stream", "--form=csv"], "bridgewright stream: unrecognized arguments: --form=csv"),
        (["stream", "--format", "xml"], "bridgewright stream: argument --format: invalid choice: 'xml'"),
        (["stream", "--count", "0"], "argument --count: '0' is no number of readings; wanted a whole number from 1 up"),
        (["stream", "--count", "²"], "argument --count: '²' is no number of readings"),
        (["stream", "--samples", "9" * 5000], f"--samples: '{'9' * 40}' is no number of readings"),
        (["stream", "--baud", "1"], "argument --baud: '1' is no rate; wanted baud from 300 to 4000000, usually 115200"),
    ],
)
def test_wrong_words_are_usage(capsys, words, said):
    """What the parser refuses leaves with 2, says what was wanted, and where help is."""
    assert main(words) == 2
    err = capsys.readouterr().err
    assert said in err
    assert err.endswith(f"try: bridgewright {words[0]} --help\n")


# Leaving


@pytest.mark.parametrize(
    ("error", "code"),
    [
        (UnitError("u"), 2),
        (PatternError("p"), 2),
        (FileError("f"), 3),
        (LinkError("l"), 4),
        (SheetError("s"), 5),
    ],
)
def test_error_becomes_words_and_a_code(failing, capsys, error, code):
    """What is wrong is said in one line on standard error, and its kind is the exit code."""
    failing(error)
    assert main(["stream"]) == code
    assert capsys.readouterr() == ("", f"bridgewright: {error}\n")


def test_fault_of_several_lines_stays_several_lines(failing, capsys):
    """All faults of a file are said, a line each, and a line end within one is shown."""
    failing(FileError("x.toml: one", "x.toml: two\x1b[2J\nbridgewright: all is well"))
    assert main(["stream"]) == 3
    assert capsys.readouterr().err.splitlines() == [
        "bridgewright: x.toml: one",
        "bridgewright: x.toml: two\\x1b[2J\\x0abridgewright: all is well",
    ]


def test_keyboard_interrupt_leaves_quietly(failing, capsys):
    """Ctrl-C is no fault."""
    failing(KeyboardInterrupt())
    assert main(["stream"]) == 130
    assert capsys.readouterr() == ("", "")


@pytest.mark.parametrize("words", [["--help"], ["stream", "--help"], ["stream", "sim:pace=fast"]], ids=" ".join)
def test_reader_that_has_left_is_no_fault(words):
    """Output into a pipe that nobody reads any more ends the program at once and without a word."""
    reading, writing = os.pipe()
    os.close(reading)
    try:
        done = child(*words, stdout=writing, stderr=subprocess.PIPE, capture_output=False)
    finally:
        os.close(writing)
    assert (done.returncode, done.stderr) == (0, "")


@pytest.mark.skipif(not os.path.exists("/dev/full"), reason="needs /dev/full")
def test_output_on_a_full_disk_is_said():
    """Readings that cannot be written end the program in words, not in a traceback."""
    with open("/dev/full", "w", encoding="utf-8") as full:
        done = child("stream", "sim:pace=fast", stdout=full, stderr=subprocess.PIPE, capture_output=False)
    assert (done.returncode, done.stderr) == (3, "bridgewright: cannot go on: No space left on device\n")


@pytest.mark.parametrize(
    ("words", "closed", "code"),
    [("stream 'sim:pace=fast&duration=1'", "1>&-", 0), ("quantum", "2>&-", 2)],
)
def test_closed_output_is_no_fault(words, closed, code):
    """With standard output or error closed there is nobody to read, and the program does its work."""
    done = subprocess.run(
        f"{sys.executable} -m tui {words} {closed}",
        shell=True,
        cwd=ROOT,
        env=BUFFERED,
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    assert (done.returncode, done.stdout, done.stderr) == (code, "", "")
