"""`verify`: a bridge file judged by loads it has not seen, in words and an exit code."""

from dataclasses import replace
from datetime import UTC, datetime

import pytest

from bridgeio.fit_table import FitTable, write_fit
from tests import fitted, known_loads, shed
from tui.__main__ import main


@pytest.fixture
def bridge(tmp_path):
    """The shed's bridge file."""
    path = tmp_path / "shed.bridge.toml"
    path.write_text(fitted.bridge_text(12), encoding="utf-8")
    return path


@pytest.fixture
def judge(bridge, tmp_path, capsys):
    """Verify a bridge file by steps; gives exit code, output and talk."""

    def run(steps, file=bridge, **told):
        path = tmp_path / "second.toml"
        path.write_text(known_loads.sheet_text(steps, **told), encoding="utf-8")
        code = main(["verify", str(file), "--steps", str(path)])
        said = capsys.readouterr()
        return code, said.out, said.err

    return run


def test_shed_bridge_holds_and_is_wider_than_needed(judge):
    """All 150 loads and 23 powers of known truth are inside; the words say so, and why it could be narrower."""
    code, out, err = judge(known_loads.load_steps() + known_loads.power_steps())
    print("\n".join(line for line in out.splitlines() if not line[:4].strip().isdigit()))
    assert (code, err) == (0, "")
    for words in (
        "SWR: 150 of 150 inside (150 without", "excludes coverage below 98 %", "SWR intervals: they hold, and are",
        "power: 23 of 23 inside", "power intervals: about right",
    ):  # fmt: skip
        assert words in out.replace("\n  ", " ")
    assert out.count("  inside\n") == 173
    assert max(map(len, out.splitlines()[1:])) <= 80


def test_narrowed_intervals_are_called_too_narrow(judge, tmp_path):
    """A file that promises a fifth of its leakage is told off in capitals, with the chance, and by exit code 5."""
    found = shed.fitted(12)
    bands = tuple(
        replace(band, directivity_limit=band.directivity_limit / 5.0, forward_leak_limit=band.forward_leak_limit / 5.0)
        for band in found.bridge.bands
    )
    boast = tmp_path / "boast.toml"
    table = FitTable.of_fit(
        replace(found, bridge=replace(found.bridge, bands=bands)),
        datetime(2026, 1, 31, tzinfo=UTC),
        shed.sheet(12).digest,
    )
    write_fit(boast, fitted.SHEET.read_text(encoding="utf-8"), table)
    code, out, _ = judge(known_loads.load_steps(rows=slice(0, 40)), boast)
    assert code == 5
    assert "SWR intervals: TOO NARROW; chance of so few inside 95 % intervals: below 0.01 %" in out.replace("\n  ", " ")
    assert "OUTSIDE" in out


def test_few_loads_cannot_tell_and_it_is_said(judge):
    """Three loads inside exclude little: the coverage they exclude, and how many would tell, are named."""
    code, out, _ = judge(known_loads.load_steps(rows=slice(0, 3)))
    told = out.replace("\n  ", " ")
    assert code == 0
    assert "3 of 3 inside (3 without the references' own range); this excludes coverage below 37 %" in told
    assert "so few steps cannot tell: 29, all inside, would exclude coverage below 90 %" in told


def test_steps_fitted_on_are_left_out(judge, bridge, capsys):
    """Steps of the file itself judge nothing; with no others there is no verdict, and exit code 5."""
    load = next(step for step in shed.sheet(12).steps if step.kind == "load")
    code, out, _ = judge([shed.sheet(12).steps[0], load, *known_loads.load_steps(rows=slice(0, 2))])
    assert code == 0
    assert "left out, step 1: a dark step holds no load" in out
    assert "left out, step 2: the bridge was fitted on this very measurement" in out
    assert "SWR: 2 of 2 inside" in out
    assert main(["verify", str(bridge), "--steps", str(bridge)]) == 5
    said = capsys.readouterr()
    assert "left out, step 2-24, 34-57: the bridge was fitted on" in said.out
    assert "holds no load or power step to judge by" in said.err


def test_real_parts_are_shown_with_their_range(judge):
    """Ohms, open and a load behind line appear as they were told, each with the SWR range of its parts."""
    base = [step for step in shed.sheet(12).steps if step.kind == "load"]
    parts = [replace(base[at], reflected=base[at].reflected + 0.01) for at in (1, 4, 6)]
    code, out, _ = judge(parts)
    assert code == 0
    assert "100             2.00 (1.98-2.02)" in out
    assert "25 45 deg" in out
    assert "open            above 1000" in out


@pytest.mark.parametrize(("told", "words"), [({"full_scale": 65520}, "bridge.full_scale: found 65520, but")])
def test_steps_of_another_bridge_are_refused(judge, told, words):
    """Counts of another converter would mean something else: a fault of the file, exit code 3."""
    code, out, err = judge(known_loads.load_steps(rows=slice(0, 3)), **told)
    assert code == 3
    assert words in err
    assert "wanted steps of the same bridge" in err
    assert not out


def test_bench_sheet_cannot_be_judged(judge):
    """A sheet without a fit is refused with the remedy."""
    code, _, err = judge(known_loads.load_steps(rows=slice(0, 3)), fitted.SHEET)
    assert code == 3
    assert "run `bridgewright fit" in err
