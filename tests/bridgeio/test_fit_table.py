"""The [fit] table: the same numbers come back, a changed one is noticed, and a file is written whole or not at all."""

import os
import re
import signal
import subprocess
import sys
import tomllib
from contextlib import suppress
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from bridgeio.bridge_file import load_bridge_file, parse_bridge_file, sheet_text
from bridgeio.errors import FileError
from bridgeio.fit_table import FitTable, _id_of, toml_text, write_fit, write_whole
from calibration.meter import Meter
from calibration.warmth import DiodeKind
from tests import fitted, shed

ROOT = Path(__file__).parents[2]


def fit_part(text):
    """The [fit] tables of a bridge file, as text."""
    return text[text.index("[fit]") :]


def content():
    """The [fit] table of the shed bridge, to be changed."""
    return tomllib.loads(fit_part(fitted.bridge_text(12)))["fit"]


def test_file_gives_back_exactly_what_was_fitted(tmp_path):
    """Every number of laws, bands and covariances is the same after writing and loading, to the last bit.

    Of a covariance the lower half is kept; the upper one, which rounding may have left unlike it, mirrors it.
    """
    path = tmp_path / "shed.toml"
    write_fit(path, sheet_text(fitted.SHEET), fitted.table(12))
    before, loaded = shed.fitted(12).bridge, load_bridge_file(path)
    after = loaded.calibrated()
    assert loaded.fit_id == fitted.table(12).id
    assert (after.name, after.full_scale, after.z0_ohm) == (before.name, before.full_scale, before.z0_ohm)
    assert (after.forward_sd, after.reflected_sd, after.reference_pct) == (
        before.forward_sd,
        before.reflected_sd,
        before.reference_pct,
    )
    assert after.forward_law == before.forward_law
    assert after.reflected_law == before.reflected_law
    for one, other in zip(after.bands, before.bands, strict=True):
        for name in set(one.__slots__) - {"covariance"}:
            assert getattr(one, name) == getattr(other, name), name
        assert np.array_equal(np.tril(one.covariance), np.tril(other.covariance))
        assert np.array_equal(one.covariance, one.covariance.T)


def test_readings_by_the_file_are_those_by_the_fit():
    """A meter by the file reads every load as the meter by the fit does, intervals included."""
    loads = shed.table("shed_loads")
    by_fit, by_file = (
        Meter(bridge).read(loads["forward_12"], loads["reflected_12"], frequency_hz=loads["frequency_hz"], samples=50)
        for bridge in (shed.fitted(12).bridge, parse_bridge_file(fitted.bridge_text(12), "x").calibrated())
    )
    for name in ("forward_w", "rho", "forward_low_w", "forward_high_w", "swr_low", "swr_high", "net_low_w"):
        assert getattr(by_fit, name) == pytest.approx(getattr(by_file, name), rel=1e-6, nan_ok=True), name


@given(st.data())
def test_changed_digit_is_noticed(data):
    """Any digit of a fitted number changed by hand makes the file refused, with both ids or the part that is broken."""
    text = fit_part(fitted.bridge_text(12))
    lines = [
        m.span() for m in re.finditer(r"(?m)^(?!id|date|program|steps|reference_scatter_pct| )\w+ = .*\d.*$", text)
    ]
    start, end = data.draw(st.sampled_from(lines))
    digits = [at for at in range(text.index("=", start), end) if text[at].isdigit()]
    at = data.draw(st.sampled_from(digits))
    digit = data.draw(st.sampled_from([d for d in "0123456789" if d != text[at]]))
    changed = text[:at] + digit + text[at + 1 :]
    try:
        same = tomllib.loads(changed) == tomllib.loads(text)
    except tomllib.TOMLDecodeError:  # a zero in front
        return
    if not same:  # the last digit of 17 may stand for the same number
        with pytest.raises(
            FileError, match=r"x: fit.*(they were changed after the fit|is not whole).*to write it anew"
        ):
            FitTable.read(tomllib.loads(changed)["fit"], "x")


def test_changed_digit_tells_both_ids():
    """The fault names the id found, the id that the numbers give, and the command that makes them agree."""
    whole = content()
    whole["band"][2]["gain_forward"] += 1.0
    with pytest.raises(FileError) as caught:
        FitTable.read(whole, "my shed.toml")
    assert str(caught.value) == (
        f"my shed.toml: fit.id: found {fitted.table(12).id:04X}, but its numbers give {_id_of(whole):04X}: they were "
        "changed after the fit; run `bridgewright fit 'my shed.toml' -o 'my shed.toml'` to write it anew"
    )


@pytest.mark.parametrize(
    "spoil",
    [
        lambda whole: whole["band"].clear(),
        lambda whole: whole["band"][0]["covariance"].pop(),
        lambda whole: whole["band"][0].update(covariance=[1.0]),
        lambda whole: whole["band"][0].update(gain_forward=float("nan")),
        lambda whole: whole["forward"].update(scale=-1.0),
        lambda whole: whole["forward"].update(scale=float("inf")),
        lambda whole: whole["reflected"].update(law="quantum"),
        lambda whole: whole.update(reference_pct=10**400),
        lambda whole: whole.update(forward=[1, 2]),
    ],
)
def test_fit_that_could_not_be_read_by_is_refused(spoil):
    """A table whose id is right but which no meter could use is told as not whole."""
    whole = content()
    spoil(whole)
    with suppress(AttributeError, OverflowError):  # then no id is right
        whole["id"] = f"{_id_of(whole):04X}"
    with pytest.raises(FileError, match="fit: is not whole"):
        FitTable.read(whole, "x")


def test_steps_and_comments_survive():
    """What stood in the sheet stands in the bridge file, letter by letter, before the fit."""
    sheet = sheet_text(fitted.SHEET)
    assert fitted.bridge_text(12).startswith(sheet.rstrip() + "\n\n# Written by `bridgewright fit`")


def test_fitting_anew_changes_only_the_fit(tmp_path):
    """Written over itself again and again, a bridge file stays the same."""
    path = tmp_path / "shed.toml"
    path.write_text(fitted.bridge_text(12), encoding="utf-8")
    for _ in range(3):
        write_fit(path, path.read_text(encoding="utf-8"), fitted.table(12))
    assert path.read_text(encoding="utf-8") == fitted.bridge_text(12)


def test_step_added_after_the_fit_keeps_its_comment(tmp_path):
    """A step that somebody appends at the end of a bridge file moves before the fit, with the comment above it."""
    path = tmp_path / "shed.toml"
    added = '# once more, in winter\n[[step]]\nkind = "dark"\nforward = 4.9\nreflected = 2.4\n# the end\n'
    write_fit(path, fitted.bridge_text(12) + "\n" + added, fitted.table(12))
    text = path.read_text(encoding="utf-8")
    assert added in text
    assert text.index(added) < text.index("[fit]")
    assert text.count("# Written by") == text.count("[fit]\n") == 1
    assert len(parse_bridge_file(text, "x").steps) == len(shed.sheet(12).steps) + 1


def test_line_ends_of_the_sheet_are_kept(tmp_path):
    """A sheet with CR LF becomes a bridge file with CR LF throughout, and loads."""
    path = tmp_path / "shed.toml"
    write_fit(path, sheet_text(fitted.SHEET).replace("\n", "\r\n"), fitted.table(12))
    data = path.read_bytes()
    assert data.count(b"\n") == data.count(b"\r\n")
    assert load_bridge_file(path).calibrated().bands


@pytest.mark.parametrize("form", ['fit = { id = "1" }\n', 'fit.id = "1"\n'])
def test_fit_in_another_form_is_left_alone(tmp_path, form):
    """A [fit] written in a way that cannot be told from the steps is not cut out by guess: nothing is written."""
    path = tmp_path / "shed.toml"
    path.write_text("before", encoding="utf-8")
    with pytest.raises(FileError, match=r"not written: the sheet holds .* remove it by hand"):
        write_fit(path, form + sheet_text(fitted.SHEET), fitted.table(12))
    assert path.read_text(encoding="utf-8") == "before"


@given(st.text(st.characters(exclude_categories=["Cs"])))
def test_any_text_is_toml_text(text):
    """Text in quotes reads back as it was, whatever characters it holds."""
    assert tomllib.loads(f"a = {toml_text(text)}")["a"] == text


def test_notes_with_quotes_and_backslashes_are_written(tmp_path):
    """Sentences of a fit may hold any character."""
    note = 'say "73" \\ \x7f é'
    table = FitTable(fitted.table(12).id, fitted.table(12).content | {"notes": [note]})
    write_fit(tmp_path / "x.toml", sheet_text(fitted.SHEET), table)
    assert tomllib.loads((tmp_path / "x.toml").read_text(encoding="utf-8"))["fit"]["notes"] == [note]


# Written whole or not at all


@pytest.mark.parametrize("failing", ["os.fsync", "os.replace", "os.chmod"])
def test_failed_write_leaves_the_old_file(tmp_path, monkeypatch, failing):
    """Where writing fails at any point the old file is unchanged, nothing is left behind, and the fault says so."""
    path = tmp_path / "shed.toml"
    path.write_text("old", encoding="utf-8")

    def full(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(failing, full)
    with pytest.raises(
        FileError, match=f"^{path}: cannot be written: No space left on device; what was there before is"
    ):
        write_whole(path, "new")
    assert [(one.name, one.read_text()) for one in tmp_path.iterdir()] == [("shed.toml", "old")]


def test_killed_writer_leaves_the_old_file(tmp_path):
    """A program killed when all is written but the last step has changed nothing."""
    path = tmp_path / "shed.toml"
    path.write_text("old", encoding="utf-8")
    code = (
        "import os, signal; from bridgeio import fit_table;"
        "os.replace = lambda *_: os.kill(os.getpid(), signal.SIGKILL);"
        f"fit_table.write_whole({str(path)!r}, 'new')"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=ROOT, timeout=60, check=False)
    assert done.returncode == -signal.SIGKILL
    assert path.read_text(encoding="utf-8") == "old"


def test_folder_that_cannot_be_written_to_is_told(tmp_path):
    """A folder that is absent or takes no files is told as such; nothing appears."""
    for path in (tmp_path / "absent" / "x.toml", Path("/proc/x.toml")):
        with pytest.raises(FileError, match=f"^{path}: cannot be written: "):
            write_whole(path, "new")
    assert not list(tmp_path.iterdir())


def test_what_is_no_file_is_never_replaced(tmp_path):
    """A folder, a pipe or a device in the file's place stays what it is."""
    os.mkfifo(tmp_path / "pipe")
    for path in (tmp_path, tmp_path / "pipe", Path("/dev/null")):
        with pytest.raises(FileError, match="is no file that could be replaced"):
            write_whole(path, "new")
    assert (tmp_path / "pipe").is_fifo()


def test_permissions_are_kept(tmp_path):
    """A file that was replaced is as readable as before, a new one as readable as any."""
    old, new = tmp_path / "old", tmp_path / "new"
    old.write_text("x", encoding="utf-8")
    old.chmod(0o640)
    for path in (old, new):
        write_whole(path, "new")
    mask = os.umask(0)
    os.umask(mask)
    assert (old.stat().st_mode & 0o777, new.stat().st_mode & 0o777) == (0o640, 0o666 & ~mask)


def test_diode_learnt_from_two_temperatures_goes_before_the_named_one(tmp_path):
    """Its three numbers stand in [fit], belong to the id, and are what readings at other temperatures use."""
    learnt = DiodeKind(0.61, 2.5, 1.2)
    table = FitTable.of_fit(
        replace(shed.fitted(12), diode=learnt), datetime(2026, 1, 31, tzinfo=UTC), shed.sheet(12).digest
    )
    path = tmp_path / "warm.toml"
    write_fit(path, sheet_text(fitted.SHEET).replace('diode = "germanium"', 'diode = "silicon"'), table)
    assert load_bridge_file(path).calibrated().diode == learnt
    path.write_text(path.read_text(encoding="utf-8").replace("eg_ev = 0.61", "eg_ev = 0.62"), encoding="utf-8")
    with pytest.raises(FileError, match="were changed after the fit"):
        load_bridge_file(path)
