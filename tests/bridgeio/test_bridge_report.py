"""The report of a bridge file: its figures are the fit's, its page is inert, and no law or band count breaks it."""

import base64
import re
import subprocess
import sys
from dataclasses import replace
from datetime import UTC, datetime
from html.parser import HTMLParser
from pathlib import Path
from xml.etree import ElementTree

import numpy as np
import pytest

from bridgeio import bridge_facts, bridge_report
from bridgeio.bridge_file import load_bridge_file
from bridgeio.errors import FileError
from bridgeio.fit_table import FitTable, write_fit
from bridgeio.fitted_file import load_fitted
from calibration.bridge import Band, Bridge
from calibration.fit import Fit
from calibration.laws import LogLaw, TableLaw
from calibration.meter import Meter
from calibration.reflection import rho_from_swr, swr_from_rho
from tests import fitted, shed
from tui.door import visible

ROOT = Path(__file__).parents[2]
NASTY = 'shed</h1><script>alert(1)</script>\u202e\x1b]0;x\x07" onload="x'


@pytest.fixture
def path(tmp_path):
    """The shed's bridge file."""
    place = tmp_path / "shed.bridge.toml"
    place.write_text(fitted.bridge_text(12), encoding="utf-8")
    return place


def section(title, path):
    """A section of the report by its title."""
    return next(one for one in bridge_facts.sections(load_fitted(path)) if one.title == title)


def test_text_fits_a_terminal_and_names_what_was_fitted(path, monkeypatch):
    """No line has more than 80 columns; name, fit id, date, law, reference and notes are all there."""
    monkeypatch.chdir(path.parent)
    lines = bridge_report.text(path.name)
    assert max(map(len, lines)) <= 80
    words = "\n".join(lines)
    file = load_bridge_file(path)
    for told in (
        file.name, f"{file.fit_id:04X}", "2026-01-31", "bridgewright ", "diode, germanium", "50 ohm", "4095 counts",
        "is that of the 57 steps", "5 % of reading", "return loss at least 36 dB", "23 power, 9 reversed, 24 load",
    ):  # fmt: skip
        assert told in words, told
    for heading in ("BRIDGE", "DETECTOR LAWS", "DIRECTIVITY AND LEAKAGE", "COUPLING", "SWR INTERVALS", "STEPS"):
        assert heading in lines


def test_figures_are_those_of_the_fit(path):
    """Laws, leakage, coupling and residuals of the tables are the fitted numbers, rounded."""
    bridge, found = shed.fitted(12).bridge, shed.fitted(12)
    laws = section("Detector laws", path).rows
    assert laws[1][2] == f"{bridge.forward_law.scale:.3f} counts"
    assert laws[5][2] == f"{bridge.reflected_law.load_term:.3f}"
    assert laws[5][3] == f"{100 * np.sqrt(bridge.bands[0].covariance[7, 7]):.1f} %"
    for row, band in zip(section("Directivity and leakage", path).rows, bridge.bands, strict=True):
        assert row[0] == f"{band.frequency_hz / 1e6:.3f}"
        assert float(row[2]) == pytest.approx(-20 * np.log10(band.directivity_limit), abs=0.06)
        assert float(row[3]) == pytest.approx(swr_from_rho(band.directivity_limit), abs=6e-4)
        assert float(row[5]) == pytest.approx(-20 * np.log10(band.forward_leak_limit), abs=0.06)
    for row, band in zip(section("Coupling", path).rows, bridge.bands, strict=True):
        assert float(row[1]) == pytest.approx(band.gain_forward, rel=6e-4)
        assert float(row[7]) == pytest.approx(20 * np.log10(band.gain_reflected / band.gain_forward), abs=0.006)
    steps = section("Steps", path)
    for residual in found.residuals:
        cell = steps.rows[residual.step][7 if residual.what == "reflected" else 6]
        assert float(cell) == pytest.approx(residual.sigmas, abs=0.051)


def test_interval_table_is_what_the_meter_says(path):
    """Each cell of SWR 2 at 10 W is the meter's own interval of a ratio of 1/9; columns are the SWRs asked for."""
    bridge = load_fitted(path).bridge
    table = section("SWR intervals", path)
    assert table.header[2:] == ("SWR 1.1", "SWR 1.2", "SWR 1.5", "SWR 2", "SWR 3", "SWR 5")
    assert [row[1] for row in table.rows[:3]] == ["1", "10", "100"]
    meter = Meter(bridge)
    for band, row in zip(bridge.bands, table.rows[1::3], strict=True):
        forward = bridge.forward_law.counts(10.0 * band.gain_forward**2)
        reflected = bridge.reflected_law.counts(10.0 / 9.0 * band.gain_reflected**2)
        found = meter.read(forward, reflected, frequency_hz=band.frequency_hz)
        assert row[5] == f"{found.swr_low[0]:.2f}-{found.swr_high[0]:.2f}"
        assert found.swr_low[0] < 2.0 < found.swr_high[0]


def test_sd_of_powers_is_what_the_meters_interval_uses(path):
    """The sd of the ratio at 10 W and SWR 2, times 1.96, is the half-width of M that a reading allows for its laws."""
    bridge = load_fitted(path).bridge
    for band in bridge.bands:
        *_, ratio_db = bridge_facts.power_sds_db(bridge, band, 10.0, 2.0)
        reading = bridge_facts.interval_grid(Meter(bridge), band, 10.0, [2.0])
        own = reading._terms
        half = (own.ratio_high - own.ratio_low)[0, 0] / 2.0 / float(rho_from_swr(2.0)) ** 2
        assert 1.959964 * ratio_db * np.log(10) / 10 == pytest.approx(half, rel=0.02)


class Tags(HTMLParser):
    """Names and attributes of all tags of a page."""

    def __init__(self, page):
        super().__init__()
        self.found = []
        self.feed(page)

    def handle_starttag(self, tag, attrs):
        self.found.append((tag, dict(attrs)))


@pytest.fixture(scope="module")
def page(tmp_path_factory):
    """The page of a bridge with a hostile name, and notes and dates no better."""
    pytest.importorskip("matplotlib")
    place = tmp_path_factory.mktemp("page") / "nasty.bridge.toml"
    nasty = "".join(f"\\u{ord(char):04x}" if not char.isalnum() else char for char in NASTY)
    text = fitted.bridge_text(12).replace('name = "garden shed bridge (12 bit)"', f'name = "{nasty}"')
    text = text.replace("notes = [", f'notes = ["{nasty}", ').replace('program = "', f'program = "{nasty} ')
    place.write_text(text, encoding="utf-8")
    assert load_bridge_file(place).name == NASTY
    return bridge_report.html(place, visible=visible)


def test_page_is_inert_whatever_the_file_holds(page):
    """No script, no handler, no link and no address but data; a hostile name is shown escaped and drives nothing."""
    tags = Tags(page).found
    assert {tag for tag, _ in tags} <= {
        *("html", "head", "meta", "title", "style", "body", "h1", "h2", "p", "div"),
        *("table", "thead", "tbody", "tr", "th", "td", "figure", "img", "figcaption"),
    }
    for tag, attributes in tags:
        assert not {name for name in attributes if name.startswith("on") or name == "href"}
        assert tag == "img" or "src" not in attributes
        assert attributes.get("src", "data:image/svg+xml;base64,").startswith("data:image/svg+xml;base64,")
    assert "url(" not in page
    assert page.count("&lt;script&gt;") == 5  # title, heading, name in its table, program, note
    assert "\\u202e\\x1b]0;x\\x07&quot; onload=&quot;x" in page
    assert not re.search("[\x00-\x09\x0b-\x1f\x7f-\x9f\u202e]", page)


def test_pictures_are_whole_and_point_nowhere(page):
    """Five drawings of well-formed SVG, each with words that say what it shows; none refers outside itself."""
    images = [attributes for tag, attributes in Tags(page).found if tag == "img"]
    assert len(images) == 5
    assert all(len(one["alt"]) > 40 for one in images)
    for one in images:
        root = ElementTree.fromstring(base64.b64decode(one["src"].partition(",")[2]))
        assert root.tag.endswith("svg")
        for element in root.iter():
            assert "script" not in element.tag
            links = [value for name, value in element.attrib.items() if name.endswith("href")]
            assert all(value.startswith(("#", "data:image/png")) for value in links)


def bridge_of(forward, reflected, count):
    """A bridge with these laws and so many bands."""
    size = 2 + len(forward.parameters) + len(reflected.parameters)
    hertz = np.geomspace(1.9e6, 50e6, count)
    bands = [Band(float(hz), 1.0, 1.1, 0.03, 0.05, 0.02, 0.05, covariance=1e-6 * np.eye(size)) for hz in hertz]
    return Bridge("b", 65520, forward, reflected, tuple(bands))


def knots():
    """A table law from 100 to 60000 counts."""
    counts = np.geomspace(100.0, 60000.0, 8)
    return TableLaw(50.0, counts, np.log(counts / 400.0), 1.0 / counts)


@pytest.mark.parametrize(("detector", "law", "count"), [("log", LogLaw(20000.0, 600.0), 1), ("table", knots(), 12)])
def test_any_law_and_number_of_bands_is_reported(tmp_path, detector, law, count):
    """A log and a table detector, one band or twelve, no step of use: words and pictures come out all the same."""
    pytest.importorskip("matplotlib")
    sheet = f'schema = 1\n[bridge]\nname = "b"\nfull_scale = 65520\ndetector = "{detector}"\n'
    found = Fit(bridge_of(law, law, count), 0.01, (), 1.0, ())
    path = tmp_path / "b.toml"
    write_fit(path, sheet, FitTable.of_fit(found, datetime(2026, 1, 31, tzinfo=UTC), ""))
    words = "\n".join(bridge_report.text(path))
    assert "counts/dB" in words if detector == "log" else "8 powers, 100.0-60000.0 counts" in words
    assert "were changed after its fit" in words.replace("\n", " ")
    assert len(section("SWR intervals", path).rows) == count
    assert bridge_report.html(path, visible=visible).count("<img ") == 5


def test_missing_matplotlib_is_told_in_words(path):
    """Without matplotlib the page is refused with exit code 2 and the line that installs it; the text still comes."""
    code = (
        "import sys; sys.modules['matplotlib'] = None\n"
        "from tui.__main__ import main\n"
        f"print(main(['report', {str(path)!r}, '--html', {str(path) + '.html'!r}]), main(['report', {str(path)!r}]))\n"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, timeout=120)
    assert "pip install 'bridgewright[report]'" in done.stderr
    assert done.stdout.splitlines()[-1] == "2 0"
    assert "DETECTOR LAWS" in done.stdout
    assert not Path(f"{path}.html").exists()


@pytest.mark.parametrize(
    "spoil",
    [("residual = [", "residues = ["), ('what = "power"', 'that = "power"'), ("reference_scatter_pct = ", "x = ")],
)
def test_spoilt_record_of_a_fit_is_a_fault_of_the_file(path, spoil):
    """What the id does not guard may be missing or changed: told in words with the remedy, never a trace."""
    path.write_text(path.read_text(encoding="utf-8").replace(*spoil), encoding="utf-8")
    with pytest.raises(FileError, match=r"fit: is not whole .*run `bridgewright fit "):
        bridge_report.text(path)


def test_gain_that_is_none_is_a_fault_of_the_file(tmp_path):
    """An id proves no sense: a gain of 0, for which there are no decibels, is told like any other fault."""
    law = LogLaw(20000.0, 600.0)
    bridge = bridge_of(law, law, 1)
    found = Fit(replace(bridge, bands=(replace(bridge.bands[0], gain_reflected=0.0),)), 0.01, (), 1.0, ())
    path = tmp_path / "b.toml"
    sheet = 'schema = 1\n[bridge]\nname = "b"\nfull_scale = 65520\ndetector = "log"\n'
    write_fit(path, sheet, FitTable.of_fit(found, datetime(2026, 1, 31, tzinfo=UTC), ""))
    with pytest.raises(FileError, match="band 1 has a gain out of range"):
        bridge_report.text(path)


def test_sheet_without_a_fit_is_refused_with_the_remedy():
    """A bench sheet has nothing to report yet."""
    with pytest.raises(FileError, match="bench sheet without"):
        bridge_report.text(fitted.SHEET)
