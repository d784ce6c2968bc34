"""`fit`: from a bench sheet to a bridge file, with what it found and what stays open; steps are never altered."""

import pytest

from bridgeio.bridge_file import load_bridge_file, parse_bridge_file, sheet_text
from tests import fitted, shed
from tui.__main__ import main

HEAD = 'schema = 1\n[bridge]\nname = "x"\nfull_scale = 4095\ndetector = "diode"\n'
DARK = '[[step]]\nkind = "dark"\nforward = 5.0\nreflected = 4.0\n'


def power(watts, forward, reflected=10.0, hz=14.1e6, kind="power"):
    """A step of the sheet."""
    return (
        f'[[step]]\nkind = "{kind}"\nfrequency_hz = {hz}\npower_w = {watts}\n'
        f"forward = {forward}\nreflected = {reflected}\n"
    )


@pytest.fixture
def quick(monkeypatch):
    """Let the fit be the one that was done once for all tests."""
    monkeypatch.setattr("calibration.fit.fit", lambda *_, **__: shed.fitted(12))


@pytest.fixture
def sheet(tmp_path):
    """A copy of the shed's bench sheet."""
    path = tmp_path / "shed.bench.toml"
    path.write_text(sheet_text(fitted.SHEET), encoding="utf-8")
    return path


def test_sheet_becomes_a_bridge_file(sheet, tmp_path, capsys):
    """The whole way, as a user goes it: a report on standard output, and a file that reads."""
    path = tmp_path / "shed.bridge.toml"
    assert main(["fit", str(sheet), "-o", str(path)]) == 0
    told = capsys.readouterr()
    loaded = load_bridge_file(path)
    assert len(loaded.calibrated().bands) == 6
    assert loaded.steps == load_bridge_file(sheet).steps
    for words in (
        "57 steps, 6 bands", "forward   detector: ", "reflected detector: ", " 14.200   ", "wattmeter: scatter ",
        "residuals: ", "cross-check: 3.700 MHz: balance by 25 and 100 ohm ",
        "note: 1.900 MHz: the loads do not identify", f"written: {path}, fit id {loaded.fit_id:04X}",
    ):  # fmt: skip
        assert words in told.out
    assert told.err == "bridgewright fit: 57 steps of garden shed bridge (12 bit); this takes some seconds\n"


def test_nothing_is_written_unless_told(quick, sheet, tmp_path, capsys):
    """Without -o it reports only."""
    assert main(["fit", str(sheet)]) == 0
    assert "nothing written; -o FILE writes the bridge file" in capsys.readouterr().out
    assert [path.name for path in tmp_path.iterdir()] == [sheet.name]


def test_same_file_may_be_named(quick, sheet):
    """-o onto the sheet itself keeps every line of it and adds the fit, again and again."""
    before = sheet.read_text(encoding="utf-8")
    for _ in range(2):
        assert main(["fit", str(sheet), "-o", str(sheet)]) == 0
        text = sheet.read_text(encoding="utf-8")
        assert text.startswith(before.rstrip())
        assert text.count("[fit]\n") == 1
    assert load_bridge_file(sheet).calibrated()


@pytest.mark.parametrize("spoil", [("gain_forward = 1", "gain_forward = 9"), ("[[fit.band]]", "[[fit.bnad]]")])
def test_remedy_for_a_spoilt_fit_works(quick, tmp_path, capsys, spoil):
    """A fit that was changed by hand is refused for reading; the command that the fault names makes it whole."""
    path = tmp_path / "shed.bridge.toml"
    path.write_text(fitted.bridge_text(12).replace(*spoil), encoding="utf-8")
    assert main(["stream", "sim:pace=fast", "--bridge", str(path)]) == 3
    command = capsys.readouterr().err.partition("run `bridgewright ")[2].partition("`")[0]
    assert command == f"fit {path} -o {path}"
    assert main(command.split()) == 0
    assert load_bridge_file(path).calibrated()


def test_what_was_fitted_is_what_is_written(sheet, tmp_path, monkeypatch):
    """Steps added to the sheet while it is being fitted do not slip into the file beside a fit without them."""

    def edited_meanwhile(*_, **__):
        with open(sheet, "a", encoding="utf-8") as file:
            file.write(DARK)
        return shed.fitted(12)

    monkeypatch.setattr("calibration.fit.fit", edited_meanwhile)
    assert main(["fit", str(sheet), "-o", str(tmp_path / "out.toml")]) == 0
    assert len(load_bridge_file(tmp_path / "out.toml").steps) == 57
    assert len(load_bridge_file(sheet).steps) == 58


@pytest.mark.parametrize(
    ("steps", "words"),
    [
        ("", "the sheet has no dark step; wanted one with the transmitter off"),
        (DARK, "the sheet has 0 power steps; wanted at least 3 at different powers into the dummy"),
        (DARK + power(5, 5.0) + power(1, 4.0) + power(50, 3000), "step 2 (power) has forward 5 counts, not above the "
         "dark count; was the transmitter on"),
    ],
)  # fmt: skip
def test_sheet_that_cannot_carry_a_fit_is_5(tmp_path, capsys, steps, words):
    """Too few steps, or such as contradict themselves, are told in words with exit code 5."""
    path = tmp_path / "x.toml"
    path.write_text(HEAD + steps, encoding="utf-8")
    assert main(["fit", str(path)]) == 5
    assert words in capsys.readouterr().err


CONTRADICTIONS = {
    "one count": power(5, 1000) * 3,
    "full counts": power(5, 4095) + power(50, 4095) + power(100, 4095),
    "falling": power(5, 3000) + power(50, 1000) + power(100, 300),
    "next to dark": power(5, 5.01) + power(50, 5.02) + power(100, 5.03),
    "a band without power": power(5, 1000) + power(1, 300) + power(50, 3000) + power(5, 10, 900, 28e6, "reversed"),
    "three bands": power(5, 1000, hz=1.9e6) + power(5, 1000, hz=7e6) + power(5, 1000, hz=14e6),
    "impossible powers": power(1e-300, 1000) + power(1e300, 3000) + power(1e200, 4000),
}


@pytest.mark.parametrize("steps", CONTRADICTIONS.values(), ids=CONTRADICTIONS)
def test_contradicting_steps_end_in_words_or_a_file(tmp_path, capsys, steps):
    """Whatever the steps claim: a bridge file that reads, or exit code 5 in words, and no warning of a library."""
    path = tmp_path / "x.toml"
    path.write_text(HEAD + DARK + steps, encoding="utf-8")
    code = main(["fit", str(path), "-o", str(path)])
    err = capsys.readouterr().err.splitlines()
    assert code in (0, 5)
    assert all(line.startswith("bridgewright") for line in err)
    if code == 0:
        assert load_bridge_file(path).calibrated()
    else:
        assert parse_bridge_file(path.read_text(encoding="utf-8"), "x").bridge is None


@pytest.mark.parametrize("target", ["absent/out.toml", "."])
def test_output_that_cannot_be_written_is_3(quick, sheet, tmp_path, capsys, target):
    """A folder that is not there, or a folder in place of the file, is a fault of the file; nothing is left behind."""
    assert main(["fit", str(sheet), "-o", str(tmp_path / target)]) == 3
    assert ": cannot be written: " in (err := capsys.readouterr().err) or "is no file that could be replaced" in err
    assert [path.name for path in tmp_path.iterdir()] == [sheet.name]


def test_slip_of_the_hand_is_named(sheet, capsys):
    """A power typed ten times too large is named by its step and set aside, in lines of 80 columns at most."""
    text = sheet.read_text(encoding="utf-8")
    assert "power_w = 1.097\n" in text
    sheet.write_text(text.replace("power_w = 1.097\n", "power_w = 10.97\n"), encoding="utf-8")
    assert main(["fit", str(sheet)]) == 0
    out = capsys.readouterr().out
    assert "slip: step 4: power_w 10.97 looks mistyped: the counts fit 1.1 W" in out
    assert "caution:" not in out
    assert all(len(line) <= 80 for line in out.splitlines())
