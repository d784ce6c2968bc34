"""Bench sheets that grow at the bench: nothing of the user's text is lost, and the file is whole at any moment."""

import subprocess
import sys
import tomllib
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bridgeio import bench_sheet
from bridgeio.bench_sheet import BenchSheet, SheetHead, head_text, step_text
from bridgeio.bridge_file import load_bridge_file, parse_bridge_file
from bridgeio.errors import FileError
from bridgeio.frames import Nameplate
from calibration.bench import BenchRatings, BenchStep
from calibration.candidates import Limits

ROOT = Path(__file__).parents[2]
#: A bridge file as `fit -o` leaves it.
FITTED = (ROOT / "bridgeio/simulator/sim.bridge.toml").read_text(encoding="utf-8")
FITTED_STEPS = FITTED.count("[[step]]")
HEAD = SheetHead(name="my bridge", full_scale=4095, diode="schottky")
DARK = BenchStep("dark", 5.12345, 2.5, forward_sd=0.84, reflected_sd=0.87, samples=200)
POWER = BenchStep(
    "power", 608.2, 9.4, frequency_hz=14_200_000.0, power_w=5.0, forward_sd=0.9, reflected_sd=0.8, samples=200,
    temperature_c=31.5,
)  # fmt: skip
LOAD = BenchStep("load", 641.3, 201.4, frequency_hz=14_200_000.0, load="100", line_deg=45.0, samples=100)
USERS = """# my own words
schema = 1
[bridge]     # a comment é
name = 'mine'
full_scale = 4095
detector = "table"

[[step]]
kind = "dark"   # at ten
forward = 5
reflected = 2.0"""


@pytest.fixture
def path(tmp_path):
    """Where a sheet may be."""
    return tmp_path / "my.bench.toml"


def sheet_with(path, text):
    """The sheet at `path`, after these bytes were written there."""
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return BenchSheet(path)


# A new sheet


def test_new_sheet_says_what_was_answered(path):
    """What was answered stands in the file and is read back, with a comment beside each optional key."""
    limits = Limits(
        dummy_w=100.0, dummy_j=2e3, resistor_w=2.0, power_min_w=0.5, power_max_w=100.0, max_w=150.0
    )  # fmt: skip
    ratings = BenchRatings(3.0, 200.0, 36.0, 0.5)
    head = SheetHead(
        "x", 65520, 75.0, "diode", "germanium", 4.0, 2500, 0x1A2B3C4D, 30.0, ratings=ratings, limits=limits
    )  # fmt: skip
    sheet = BenchSheet.create(path, head)
    read = load_bridge_file(path)
    assert (read.name, read.full_scale, read.z0_ohm, read.detector) == ("x", 65520, 75.0, "diode")
    assert (read.reference_mv, read.device_id, read.match_return_loss_db) == (2500, 0x1A2B3C4D, 30.0)
    assert (read.ratings, sheet.limits, read.max_w) == (ratings, limits, 150.0)
    text = path.read_text(encoding="utf-8")
    assert all(line.count("#") == 1 for line in text.splitlines() if line.startswith(("dummy_", "max_w", "reference_")))


def test_new_sheet_leaves_out_what_nobody_said(path):
    """Ratings that nobody told are not in the file, and are None when asked for."""
    sheet = BenchSheet.create(path, HEAD)
    assert "dummy_w" not in path.read_text(encoding="utf-8")
    assert sheet.limits == Limits()


def test_board_says_its_part_of_a_new_sheet():
    """Full scale, reference and id come from the nameplate; 0 there is not known."""
    plate = dict.fromkeys(Nameplate.__dataclass_fields__, 0) | {"full_scale": 65520, "name": ""}
    assert HEAD.of_board(Nameplate(**plate)) == SheetHead("my bridge", 65520, diode="schottky")
    told = HEAD.of_board(Nameplate(**plate | {"device_id": 0xAB, "reference_mv": 2500}))
    assert 'device_id = "000000AB"' in head_text(told)
    assert told.reference_mv == 2500


def test_new_sheet_never_replaces_a_file(path):
    """A file that is there already, even an empty one, is refused and kept."""
    path.write_text("kept", encoding="utf-8")
    with pytest.raises(FileError, match="exists already; wanted a new name"):
        BenchSheet.create(path, HEAD)
    assert path.read_text(encoding="utf-8") == "kept"


@pytest.mark.parametrize("name", ["", "\ud800", "x" * 201])
def test_new_sheet_with_an_impossible_name_is_refused(path, name):
    """A name that is empty, too long or no text is refused in words, and nothing is written."""
    with pytest.raises(FileError, match=r"bridge\.name|UTF-8"):
        BenchSheet.create(path, SheetHead(name, 4095))
    assert not path.exists()


@given(st.text(st.characters(codec="utf-8"), min_size=1, max_size=200))
def test_any_name_is_read_back(name):
    """A name of any characters, quotes and line ends among them, comes back as it was."""
    assert parse_bridge_file(head_text(SheetHead(name, 4095)), "x").name == name


# A step is appended


def test_step_is_written_as_people_write_it():
    """Counts to three decimals, powers as told, hertz whole with underscores; what nobody told is left out."""
    assert step_text(POWER) == (
        'kind = "power"\nfrequency_hz = 14_200_000\npower_w = 5.0\nforward = 608.2\nforward_sd = 0.9\n'
        "reflected = 9.4\nreflected_sd = 0.8\nsamples = 200\ntemperature_c = 31.5\n"
    )
    assert "forward = 5.123\n" in step_text(DARK)
    numpy = BenchStep("dark", np.float64(5.0), np.float64(2.0), samples=np.int64(7), temperature_c=np.float64(20.5))
    assert tomllib.loads(step_text(numpy))["samples"] == 7


def test_steps_are_appended_in_order(path):
    """Each step is in the file at once, the last one last."""
    sheet = BenchSheet.create(path, HEAD)
    for number, step in enumerate((DARK, POWER, LOAD), 1):
        assert len(sheet.append(step).steps) == number
        assert len(load_bridge_file(path).steps) == number
    assert [step.kind for step in load_bridge_file(path).steps] == ["dark", "power", "load"]
    assert load_bridge_file(path).steps[1:] == (POWER, LOAD)


@pytest.mark.parametrize("ends", ["\n", "\r\n"])
@pytest.mark.parametrize("last", ["", "\n", "\n\n# the end"])
@pytest.mark.parametrize("mark", [b"", b"\xef\xbb\xbf"])
def test_users_text_is_kept_byte_for_byte(path, ends, last, mark):
    """Comments, order, line ends and a byte order mark stay; undo gives back exactly the file as it was."""
    before = mark + (USERS + last).replace("\n", ends).encode()
    sheet = sheet_with(path, before)
    sheet.append(POWER)
    once = path.read_bytes()
    sheet.append(LOAD)
    assert path.read_bytes().startswith(once)
    assert once.startswith(before)
    assert (b"\r\n" in once[len(before) :]) == (ends == "\r\n")
    assert (sheet.undo(), path.read_bytes()) == (LOAD, once)
    assert (sheet.undo(), path.read_bytes()) == (POWER, before)


def test_step_goes_before_the_fit_and_the_fit_stays(path):
    """In a bridge file the step stands before [fit], whose text does not change; undo restores the file."""
    text = FITTED
    sheet = sheet_with(path, text)
    sheet.append(LOAD)
    changed = path.read_bytes().decode()
    comment = text.index("# Written by")
    assert changed.endswith(text[comment:])
    assert changed.index('load = "100"\nline_deg = 45.0\nforward = 641.3') < changed.index("# Written by")
    read = load_bridge_file(path)
    assert read.bridge is not None
    assert len(read.steps) == FITTED_STEPS + 1
    sheet.undo()
    assert path.read_bytes().decode() == text


def test_step_goes_to_the_end_where_steps_follow_the_fit(path):
    """Where the user put steps behind [fit], the new one is last all the same."""
    text = FITTED + "\n[[step]]\n" + step_text(DARK)
    sheet_with(path, text).append(LOAD)
    assert path.read_bytes().decode() == text + "\n[[step]]\n" + step_text(LOAD)


def test_fit_behind_its_steps_is_noticed(path):
    """A fit that has not seen the newest step is behind; with the step taken back it is not."""
    sheet = sheet_with(path, FITTED)
    assert not sheet.fit_is_behind
    sheet.append(LOAD)
    assert sheet.fit_is_behind
    assert "were changed after its fit" in load_bridge_file(path).outdated
    sheet.undo()
    assert not sheet.fit_is_behind
    assert load_bridge_file(path).outdated is None
    assert not sheet_with(path, USERS).fit_is_behind


def test_wrong_fit_does_not_stop_the_bench(path):
    """A [fit] whose numbers were changed, or that holds no number, is left alone and steps go on being taken."""
    text = FITTED.replace("reference_scatter_pct = ", "reference_scatter_pct = nan # ")
    text = text.replace('\nid = "', '\nid = "F')
    sheet_with(path, text).append(LOAD)
    changed = path.read_text(encoding="utf-8")
    assert len(parse_bridge_file(changed, "x", steps_only=True).steps) == FITTED_STEPS + 1
    assert changed.endswith(text[text.index("# Written by") :])


# The user edits it meanwhile


def test_edits_made_meanwhile_are_kept(path):
    """What the user changed since the last step is in the file after the next one, and undo leaves it there."""
    sheet = BenchSheet.create(path, HEAD)
    sheet.append(DARK)
    edited = path.read_text(encoding="utf-8").replace("my bridge", "your bridge") + "\n# mine\n"
    path.write_text(edited, encoding="utf-8")
    sheet.append(POWER)
    assert path.read_text(encoding="utf-8").startswith(edited)
    sheet.undo()
    sheet.undo()
    assert path.read_text(encoding="utf-8") == head_text(HEAD).replace("my bridge", "your bridge") + "\n# mine\n"


@pytest.mark.parametrize("broken", ["schema = 1\n[bridge\n", "schema = 1\n", ""])
def test_file_that_is_no_longer_right_is_refused_and_kept(path, broken):
    """Where the user has left the file half edited, no step is written and the file is left so."""
    sheet = BenchSheet.create(path, HEAD)
    path.write_text(broken, encoding="utf-8")
    with pytest.raises(FileError, match=f"^{path}: "):
        sheet.append(DARK)
    assert path.read_text(encoding="utf-8") == broken


def test_steps_in_an_inline_array_are_refused(path):
    """TOML cannot add a [[step]] to an array in one line: said in words, the file kept."""
    text = 'step = [{kind = "dark", forward = 1, reflected = 1}]\n' + USERS.partition("[[step]]")[0]
    sheet = sheet_with(path, text)
    with pytest.raises(FileError, match=r"wanted every step as a \[\[step\]\] table"):
        sheet.append(DARK)
    assert path.read_bytes().decode() == text


def test_step_that_is_wrong_is_refused_and_the_file_kept(path):
    """A step that the file's own rules refuse, counts above full scale for one, is not written."""
    sheet = BenchSheet.create(path, HEAD)
    before = path.read_bytes()
    for step, fault in (
        (BenchStep("dark", 4096.0, 0.0), "wanted at most full_scale"),
        (BenchStep("power", 1.0, 1.0), "also needs frequency_hz"),
        (BenchStep("dark", float("nan"), 0.0), "form to which none|finite"),
    ):
        with pytest.raises(FileError, match=fault):
            sheet.append(step)
    assert path.read_bytes() == before
    assert sheet.taken == ()


def test_undo_goes_no_further_than_this_sitting(path):
    """Steps that were there before are not taken out."""
    sheet = sheet_with(path, USERS)
    with pytest.raises(FileError, match="no step was taken in this sitting"):
        sheet.undo()


@pytest.mark.parametrize(("old", "new"), [("power_w = 5.0", "power_w = 5.1"), ("= 31.5\n", "= 31.5\nload_pct = 2\n")])
def test_step_the_user_has_edited_is_not_undone(path, old, new):
    """A step corrected by hand, or that got a key of its own, stays, and so do its neighbours."""
    sheet = BenchSheet.create(path, HEAD)
    sheet.append(DARK)
    sheet.append(POWER)
    edited = path.read_text(encoding="utf-8").replace(old, new)
    path.write_text(edited, encoding="utf-8")
    with pytest.raises(FileError, match="no longer there as it was written"):
        sheet.undo()
    assert path.read_text(encoding="utf-8") == edited
    assert sheet.taken[-1] == POWER


steps = st.builds(
    BenchStep,
    kind=st.just("power"),
    forward=st.floats(0.0, 4095.0),
    reflected=st.floats(0.0, 4095.0),
    frequency_hz=st.floats(1e5, 1e9),
    power_w=st.floats(1e-3, 2e3),
    forward_sd=st.floats(0.0, 50.0),
    samples=st.integers(1, 10**6),
    temperature_c=st.floats(-60.0, 150.0),
)


@settings(max_examples=30, deadline=None)
@given(st.lists(st.none() | steps, max_size=8))
def test_any_course_of_steps_and_undos_keeps_the_rest(tmp_path_factory, course):
    """After any course of steps and undos the file is the user's text and the steps that were not taken back."""
    path = tmp_path_factory.mktemp("course") / "x.toml"
    sheet = sheet_with(path, USERS)
    left = []
    for step in course:
        if step is not None:
            sheet.append(step)
            left.append(step)
        elif left:
            sheet.undo()
            left.pop()
    found = load_bridge_file(path).steps[1:]
    assert path.read_bytes().startswith(USERS.encode())
    assert [(one.power_w, one.samples) for one in found] == [(one.power_w, one.samples) for one in left]
    assert np.allclose([one.forward for one in found], [one.forward for one in left], atol=5.001e-4)
    assert np.allclose([one.frequency_hz for one in found], [one.frequency_hz for one in left], rtol=0, atol=0.501)


# Whole at any moment


def test_failed_write_leaves_file_and_sitting_as_they_were(path, monkeypatch):
    """A full disk is told; the file, what it said and what may be undone stay."""
    sheet = BenchSheet.create(path, HEAD)
    sheet.append(DARK)
    before, file = path.read_bytes(), sheet.file

    def full(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.fsync", full)
    with pytest.raises(FileError, match="No space left on device"):
        sheet.append(POWER)
    with pytest.raises(FileError, match="No space left on device"):
        sheet.undo()
    assert (path.read_bytes(), sheet.file, sheet.taken) == (before, file, file.steps)


def test_link_to_a_file_stays_a_link(tmp_path, path):
    """A sheet reached through a symbolic link is changed where it lies."""
    path.write_text(USERS, encoding="utf-8")
    link = tmp_path / "link.toml"
    link.symlink_to(path)
    BenchSheet(link).append(POWER)
    assert link.is_symlink()
    assert len(load_bridge_file(path).steps) == 2


#: Forks writers that append and undo, kills each after some changes, and prints for each: steps that the writer told
#: of last, steps in the file, and whether the file begins with the user's text.
KILLER = """
import os, random, signal, sys
from bridgeio.bench_sheet import BenchSheet
from bridgeio.bridge_file import load_bridge_file
from calibration.bench import BenchStep

def write_on(path, pipe):
    sheet = BenchSheet(path)
    while True:
        for number in range(10):
            sheet.append(BenchStep("dark", float(number), 2.0)) if number < 5 else sheet.undo()
            os.write(pipe, bytes([len(sheet.file.steps)]))

path, times, chance = sys.argv[1], int(sys.argv[2]), random.Random(7)
users = open(path, "rb").read()
for _ in range(times):
    open(path, "wb").write(users)
    ear, mouth = os.pipe()
    writer = os.fork()
    if writer == 0:
        write_on(path, mouth)
    os.close(mouth)
    told = b"".join(os.read(ear, 1) for _ in range(chance.randrange(1, 25)))
    os.kill(writer, signal.SIGKILL)
    os.waitpid(writer, 0)
    told += os.read(ear, 1000)
    os.close(ear)
    print(told[-1], len(load_bridge_file(path).steps), open(path, "rb").read().startswith(users))
"""


def kill_often(path, times):
    """Kill a writer `times` times; after each the file is as told, or one change further."""
    path.write_text(USERS, encoding="utf-8")
    command = [sys.executable, "-c", KILLER, str(path), str(times)]
    done = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, timeout=250, check=True)
    lines = [line.split() for line in done.stdout.splitlines()]
    assert len(lines) == times
    for told, found, whole in lines:
        assert abs(int(told) - int(found)) <= 1
        assert whole == "True"


def test_killed_at_any_moment_the_file_is_whole(path):
    """After a kill -9 amid appending and undoing the file parses, holds the user's text, and lost no step told of."""
    kill_often(path, 20)


@pytest.mark.long
def test_killed_a_thousand_times_the_file_is_whole(path):
    """The same, a thousand times."""
    kill_often(path, 1000)


def test_every_remark_is_of_a_key_that_a_new_sheet_may_hold():
    """No comment is left over from a key that is gone."""
    limits = Limits(1.0, 1.0, 1.0, 1.0, 1.0, 1.0)
    head = SheetHead("x", 4095, 50.0, "diode", "silicon", 1.0, 2500, 1, 30.0, BenchRatings(1.0, 1.0), limits)
    raw = tomllib.loads(head_text(head))
    assert bench_sheet._REMARKS.keys() <= raw["bridge"].keys() | raw["bench"].keys()
