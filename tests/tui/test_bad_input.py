"""Bad input at the command line: what a user reads, the code it leaves with, and that nothing drives the terminal."""

import os
import random
import shutil
import signal
import subprocess
import sys
import threading
import tty
from pathlib import Path

import pytest
from serial.tools import list_ports as serial_tools

from bridgeio.frames import Nameplate, Remark, Tallies
from bridgeio.framing import pack, pack_text
from tests import fitted
from tui.__main__ import main

ROOT = Path(__file__).parents[2]
#: As root neither exclusive use nor file modes bind: such tests step down to a user who owns nothing.
NOBODY = 65534
STEP_DOWN = ["setpriv", f"--reuid={NOBODY}", f"--regid={NOBODY}", "--clear-groups"] if os.geteuid() == 0 else []
needs_setpriv = pytest.mark.skipif(bool(STEP_DOWN) and not shutil.which("setpriv"), reason="as root needs setpriv")

EVIL = "evil\x1b[2J\x9b31m\u202e\x07\n"
#: The same in bytes that are no text.
EVIL_BYTES = b"evil\x1b[2J\x9b31m\xe2\x80\xae\x07"


def child(*words, as_nobody=False):
    """The program in a process of its own, started; output is bytes."""
    return subprocess.Popen(
        [*(STEP_DOWN if as_nobody else []), sys.executable, *words],
        cwd="/",
        env={"PYTHONPATH": str(ROOT), "PATH": os.environ["PATH"], "PYTHONDONTWRITEBYTECODE": "1"},
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
    )


def told(process, given=b""):
    """Exit code and what it wrote to standard output and error, once it has ended."""
    out, err = process.communicate(given, timeout=60)
    return process.returncode, out.decode(), err.decode()


@pytest.fixture
def port():
    """A pseudo terminal that anybody may open: the path of its far end."""
    master, slave = os.openpty()
    tty.setraw(slave)
    path = os.ttyname(slave)
    os.chmod(path, 0o666)
    os.close(slave)
    yield path
    os.close(master)


@pytest.fixture
def nothing_plugged(monkeypatch):
    """No serial port on this machine."""
    monkeypatch.setattr(serial_tools, "comports", list)


@pytest.fixture
def said(capsys):
    """Run the command line; gives its exit code, and standard error without the program's name."""

    def run(*words):
        capsys.readouterr()
        code = main([str(word) for word in words])
        out, err = capsys.readouterr()
        assert out == ""
        return code, err.removeprefix("bridgewright: ").rstrip("\n")

    return run


# Ports


@pytest.mark.usefixtures("nothing_plugged")
def test_port_that_is_not_there(said):
    """An absent port is told as such, with what is plugged in."""
    assert said("stream", "/dev/ttyUSB9") == (4, "/dev/ttyUSB9 is not there; no serial port is plugged in")


@pytest.mark.usefixtures("nothing_plugged")
def test_things_that_are_no_port(said, tmp_path):
    """A folder, a file and a device of another kind are told as what they are, a file with its near miss."""
    file = tmp_path / "log.txt"
    file.touch()
    assert said("stream", tmp_path) == (4, f"{tmp_path} is a folder, not a serial port; no serial port is plugged in")
    assert said("stream", file) == (4, f"{file} is a file, not a serial port; did you mean file:{file}?")
    code, words = said("stream", "/dev/null")
    assert (code, words.startswith("/dev/null does not open as a serial port")) == (4, True)


@needs_setpriv
def test_port_that_is_busy(port):
    """A port that another program holds is told with that program's name and process id."""
    hold = (
        f"from bridgeio.ports import DeviceSource as D; d = D({port!r}); d.open(); print('held', flush=True); input()"
    )
    holder = child("-c", hold, as_nobody=True)
    try:
        assert holder.stdout.readline() == b"held\n"
        code, out, err = told(child("-m", "tui", "stream", port, as_nobody=True))
    finally:
        holder.communicate(b"\n", timeout=20)
    name = Path(sys.executable).resolve().name
    assert (code, out) == (4, "")
    assert err.startswith(f"bridgewright: {port} is busy: ")
    assert err.endswith(f" (pid {holder.pid}) holds it; close that first\n")
    assert name[:6] in err


@needs_setpriv
def test_port_that_is_not_permitted(port):
    """A port that the user may not open is told with the reason and what helps."""
    os.chmod(port, 0o000)
    code, out, err = told(child("-m", "tui", "stream", port, as_nobody=True))
    assert (code, out) == (4, "")
    assert err.startswith(f"bridgewright: {port} may not be opened by you: its group is ")
    assert err.endswith("which does not help; a udev rule can give it a group of its own\n")


def test_port_that_goes_away():
    """A port that is unplugged while it is read is said to be gone and looked for, until the user stops it."""
    master, slave = os.openpty()
    tty.setraw(slave)
    path, over = os.ttyname(slave), threading.Event()

    def talk():
        while not over.wait(0.02):
            os.write(master, b"1100 300\n")

    talker = threading.Thread(target=talk, daemon=True)
    process = child("-m", "tui", "stream", path)
    talker.start()
    try:
        assert process.stdout.readline().startswith(b'{"time": "2')
        over.set()
        talker.join(10)
        os.close(slave)
        os.close(master)
        assert b"no bridge file" in process.stderr.readline()
        assert b"is gone: it was unplugged; looking for it" in process.stderr.readline()
        process.send_signal(signal.SIGINT)
        assert told(process)[0] == 130
    finally:
        over.set()
        process.kill()  # it would go on looking, and find what other tests plug in


# Words of the command line


@pytest.mark.parametrize(
    ("words", "answer"),
    [
        ("--frequency 14.1", "--frequency: '14.1' is no frequency; wanted like 14.1M, 14100k, hertz from 1000 up, or a "
         "band like 20m; did you mean 14.1M or 14.1k?"),
        ("--frequency 21m", "--frequency: '21m' is no frequency; wanted like 14.1M, 14100k, hertz from 1000 up, or a "
         "band like 20m; bands known: 160m, 80m, 60m, 40m, 30m, 20m, 17m, 15m, 12m, 10m, 6m"),
        ("--frequency nan", "--frequency: 'nan' is no frequency; wanted like 14.1M, 14100k, hertz from 1000 up, or a "
         "band like 20m"),
        ("--pattern (", "pattern '(' is no regular expression: missing ), unterminated subpattern at position 0"),
        ("--pattern x", "pattern 'x' lacks the group forward and reflected: write (?P<forward>...) and "
         "(?P<reflected>...), and (?P<ms>...) if there is a time"),
        ("--pattern (?P<forward>(a+)+)(?P<reflected>x)", "pattern '(?P<forward>(a+)+)(?P<reflected>x)' could take "
         "for ever on some lines: no repeated group may hold a repeat or a choice, and a dot may be repeated three "
         "times at most"),
    ],
)  # fmt: skip
def test_option_that_cannot_be_used(said, words, answer):
    """A frequency or a pattern that cannot be used is usage, and the answer says what can."""
    option, value = words.split(" ", 1)
    assert said("stream", "sim:", option, value) == (2, answer)


@pytest.mark.parametrize("value", ["1", "0", "-9600", "1e5", "fast", "²", "4000001", "9" * 5000])
def test_rate_that_is_none(said, value):
    """A rate of no port is usage, told in one line of bounded length."""
    code, words = said("stream", "/dev/ttyUSB0", f"--baud={value}")
    assert code == 2
    assert words.splitlines() == [
        f"bridgewright stream: argument --baud: {value[:40]!r} is no rate; wanted baud from 300 to 4000000, usually "
        "115200",
        "try: bridgewright stream --help",
    ]


@pytest.mark.parametrize(
    ("source", "code", "answer"),
    [
        ("simm:", 4, "there is no kind of source 'simm'; wanted a device path, file:PATH, socket://HOST:PORT, "
         "rfc2217://HOST:PORT or sim:; did you mean sim:?"),
        ("sim:pwer=5&mode=x", 4, "sim: there is no option 'pwer'; did you mean power?; mode=x cannot be used; "
         "allowed: tune, key, cw, ssb, sweep, off"),
        ("socket://localhost:1", 4, "the connection was refused; does anything listen on port 1 of localhost?"),
        ("file:", 3, "file: names no file; wanted file:PATH, or file:- for standard input"),
        ("file:/no/such/log", 3, "/no/such/log cannot be read: No such file or directory"),
        ("file:/", 3, "/ is a folder; wanted a capture or text lines"),
    ],
)  # fmt: skip
def test_source_that_cannot_be(said, source, code, answer):
    """A source of no known kind, or with wrong options, is told with what there is."""
    got, words = said("stream", source)
    assert (got, words.endswith(answer)) == (code, True), words


def test_near_miss_of_a_file(said, tmp_path):
    """A file that is not there is told with the one beside it that has nearly its name."""
    (tmp_path / "contest.txt").touch()
    assert said("stream", f"file:{tmp_path}/contets.txt") == (
        3,
        f"{tmp_path}/contets.txt cannot be read: No such file or directory; did you mean {tmp_path}/contest.txt?",
    )


# Garbage


def test_garbage_gives_no_reading_in_bounded_memory(tmp_path):
    """10 MB of random bytes: no reading, no traceback, no control byte, and less than 64 MB beyond the base."""
    path, empty = tmp_path / "noise.bin", tmp_path / "empty.bin"
    path.write_bytes(random.Random(1).randbytes(10_000_000))
    empty.touch()
    code = (
        "import resource, sys, time\n"
        "from tui.__main__ import main\n"
        "def most(): return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss // 1024\n"
        f"assert main(['stream', 'file:{empty}']) == 0\n"
        "base, began = most(), time.monotonic()\n"
        f"assert main(['stream', 'file:{path}']) == 0\n"
        "print(most() - base, round(time.monotonic() - began, 2), file=sys.stderr)\n"
    )
    code, out, err = told(child("-c", code))
    nothing, noise, figures = err.splitlines()
    assert (code, out) == (0, "")
    assert nothing == f"bridgewright stream: nothing readable came from file:{empty}"
    assert noise.startswith(f"bridgewright stream: nothing readable came from file:{path} (")
    assert "malformed frames" in noise
    assert all(line.isprintable() for line in (nothing, noise))
    assert int(figures.split()[0]) < 64, figures


@pytest.mark.parametrize("wire", ["auto", "text"])
def test_garbage_between_good_frames_hides_none_of_them(tmp_path, capsys, wire):
    """Good frames and lines in a sea of noise are read, and nothing else is."""
    noise, good, end = random.Random(2), *((pack, b"\0") if wire == "auto" else (pack_text, b"\n"))
    parts = []
    for seq in range(20):
        parts += [noise.randbytes(100), end, good(Tallies.of([seq], [10 * seq], 1000 + seq, 300))]
    path = tmp_path / "noise.bin"
    path.write_bytes(b"".join(parts))
    assert main(["stream", f"file:{path}", "--wire", wire]) == 0
    out = capsys.readouterr().out.splitlines()
    assert [f'"forward_counts": {1000.0 + seq}' in line for seq, line in enumerate(out)] == [True] * 20


@pytest.mark.parametrize("length", [0, 1, 100, 511, 512, 513, 70_000])
@pytest.mark.parametrize("byte", [b"\0", b"\n", b"1", b" ", b"$", b"\xff"])
def test_one_byte_over_and_over_gives_no_reading(tmp_path, capsys, byte, length):
    """A line that is stuck at one byte reads as nothing."""
    path = tmp_path / "stuck.bin"
    path.write_bytes(byte * length)
    assert main(["stream", f"file:{path}"]) == 0
    out, err = capsys.readouterr()
    assert out == ""
    assert "nothing readable came from" in err


# Names that mean harm


def assert_harmless(*texts):
    """Nothing but printable characters and line ends."""
    for text in texts:
        assert all(line.isprintable() for line in text.split("\n")), ascii(text)


@pytest.mark.parametrize(
    "words",
    [
        [EVIL],
        [f"--{EVIL}"],
        ["stream", f"/dev/{EVIL}"],
        ["stream", f"file:/tmp/{EVIL}"],
        ["stream", f"{EVIL}:x"],
        ["stream", f"sim:{EVIL}=1"],
        ["stream", f"sim:mode={EVIL}"],
        ["stream", "sim:", "--bridge", f"/tmp/{EVIL}"],
        ["stream", "sim:", "--frequency", EVIL],
        ["stream", "sim:", "--pattern", EVIL],
        ["stream", "sim:", "--baud", EVIL],
        ["stream", "sim:", "--format", EVIL],
        ["stream", "sim:", f"--{EVIL}", EVIL],
        ["stream", "sim:pace=fast", "--raw", f"/no/{EVIL}"],
        ["fit", f"/tmp/{EVIL}"],
        ["firmware", f"/proc/{EVIL}"],
    ],
    ids=lambda words: " ".join(words).encode("unicode_escape").decode(),
)
def test_hostile_words_are_shown_escaped(capsys, words):
    """Whatever is typed comes back visible, and a line end in it begins no line of its own."""
    assert main(words) in (2, 3, 4)
    out, err = capsys.readouterr()
    assert_harmless(out, err)
    assert "\\x1b[2J" in err
    assert not [line for line in err.splitlines() if not line.startswith(("bridgewright", "try: bridgewright"))]


def hostile_bridge(folder, name=EVIL):
    """A fitted bridge file whose name and place are hostile."""
    quoted = '"' + "".join(f"\\u{ord(char):04X}" for char in name) + '"'
    path = folder / f"{EVIL}.toml"
    text = fitted.bridge_text(12).replace('"garden shed bridge (12 bit)"', quoted)
    path.write_text(text, encoding="utf-8")
    return path


@pytest.mark.parametrize("form", ["jsonl", "csv"])
@pytest.mark.parametrize("plate", [False, True])
def test_hostile_names_drive_nothing(tmp_path, capsys, form, plate):
    """The name of a bridge file, of a board and of a path reach output and error only as text."""
    bridge = hostile_bridge(tmp_path)
    capture = tmp_path / f"{EVIL}.bin"
    name = "\x1b[2J\u202e\x07"
    nameplate = Nameplate(1, 5, 0, 1, 7, 10, 1, 65520 if plate else 4095, 0, 0, 9, 1, name)
    items = [
        Tallies.of([0], [0], 1100, 300),
        nameplate,
        Remark(2, 6, 1, 0, "\x1b[2J"),
        Tallies.of([3], [10], 1100, 300),
    ]
    capture.write_bytes(b"".join(map(pack, items)))
    assert main(["stream", f"file:{capture}", "--bridge", str(bridge), "--format", form]) == 0
    out, err = capsys.readouterr()
    assert_harmless(out, err)
    assert "\\u001b[2J" in out if form == "jsonl" else "\\x1b[2J" in out
    assert len(out.splitlines()) == 2 + (form == "csv")
    assert "\\x1b[2J" in err


def test_hostile_sheet_is_fitted_harmlessly(tmp_path, capsys, monkeypatch):
    """A sheet's own name, the values and keys of its faults, and its path are shown escaped."""
    from tests import shed

    monkeypatch.setattr("calibration.fit.fit", lambda *_, **__: shed.fitted(12))
    path = hostile_bridge(tmp_path)
    assert main(["fit", str(path), "-o", str(path)]) == 0
    assert_harmless(*capsys.readouterr())
    path.write_text('schema = 1\n"a\\u001b[2J" = 1\n[bridge]\nname = "\\u001b"\ndetector = "\\u001b[2J\\u202E"\n')
    assert main(["fit", str(path)]) == 3
    out, err = capsys.readouterr()
    assert_harmless(out, err)
    assert "\\x1b[2J" in err


def test_path_that_is_no_text_is_shown(tmp_path):
    """A path of bytes that are no text is named in escapes, to the byte."""
    folder = os.fsencode(tmp_path) + b"/" + EVIL_BYTES
    for words in (["fit", folder], ["stream", b"file:" + folder], ["stream", folder], ["stream", b"--bridge", folder]):
        code, out, err = told(child("-m", "tui", *words))
        assert code in (3, 4)
        assert_harmless(out, err)
        assert "\\x1b[2J\\udc9b31m\\u202e\\x07" in err


def test_name_beyond_the_terminals_encoding_is_escaped(tmp_path):
    """A terminal that has no such letters gets escapes, and no traceback."""
    bridge = tmp_path / "x.toml"
    bridge.write_text(fitted.bridge_text(12).replace("garden shed", "Ω gården 測"), encoding="utf-8")
    process = subprocess.run(
        [sys.executable, "-m", "tui", "stream", "file:-", "--bridge", str(bridge), "--format", "csv"],
        cwd=ROOT,
        env=os.environ | {"PYTHONIOENCODING": "latin-1"},
        input=b"1100 300\n",
        capture_output=True,
        timeout=60,
        check=True,
    )
    assert "\\u03a9 gården \\u6e2c bridge (12 bit)" in process.stdout.decode("latin-1")
    assert process.stderr == b""
