"""Rows for programs: names and order of columns, nothing that is no number, and cells that do nothing."""

import csv
import io
import json

import numpy as np
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from bridgeio.desk import TimedReadings
from bridgeio.rows import COLUMNS, csv_header, csv_rows, json_rows, rfc3339
from calibration.meter import Meter, uncalibrated
from tests import shed

KEYS = [
    "time", "forward_w", "forward_low_w", "forward_high_w", "reflected_w", "reflected_low_w", "reflected_high_w",
    "net_w", "net_low_w", "net_high_w", "rho", "rho_low", "rho_high", "swr", "swr_low", "swr_high", "return_loss_db",
    "forward_counts", "reflected_counts", "frequency_hz", "averaged", "bridge", "flags",
]  # fmt: skip


def batch(forward, reflected, time_s=np.nan, averaged=1, **options):
    """Readings of the shed bridge at 14.2 MHz."""
    readings = Meter(shed.fitted(12).bridge).read(forward, reflected, frequency_hz=14.2e6, **options)
    return TimedReadings(readings, np.full(len(readings), time_s), np.full(len(readings), averaged))


def every_kind():
    """Readings of every kind: good, silent, below reading, above unity, clipped at either side, swapped."""
    return batch([1100.0, 5.0, 300.0, 900.0, 4095.0, 900.0], [300.0, 2.0, 2.5, 950.0, 300.0, 4095.0])


def test_json_has_the_documented_keys_in_order():
    """A row is one object with exactly these keys, in this order, in one line."""
    (row,) = json_rows(batch(1100.0, 300.0, 1.5, averaged=3), "shed")
    assert list(json.loads(row)) == KEYS == list(COLUMNS)
    assert "\n" not in row
    found = json.loads(row)
    assert (found["time"], found["averaged"], found["bridge"], found["flags"]) == (
        "1970-01-01T00:00:01.500Z",
        3,
        "shed",
        [],
    )


def test_csv_has_the_same_columns():
    """The header names them in the same order."""
    assert csv_header() == ",".join(KEYS)


def test_numbers_keep_full_precision():
    """What a row says of a number reads back as the very same number, in both forms."""
    readings = batch([1100.123456789, 219.0], [300.987654321, 85.66])
    for number, (row, line) in enumerate(zip(json_rows(readings, "x"), csv_rows(readings, "x"), strict=True)):
        values = json.loads(row)
        cells = dict(zip(KEYS, next(csv.reader([line])), strict=True))
        for name in KEYS[1:-3]:
            expected = float(getattr(readings.readings, name)[number])
            assert values[name] == float(cells[name]) == expected, name


def test_unknown_is_null_and_an_empty_cell():
    """Nothing of NaN or infinity is ever written; what is unknown is null, or nothing between two commas."""
    readings = every_kind()
    rows = list(json_rows(readings, None))
    assert all(json.loads(row, parse_constant=pytest.fail) for row in rows)
    silent = json.loads(rows[1])
    assert (silent["forward_w"], silent["swr"], silent["time"], silent["bridge"]) == (0.0, None, None, None)
    assert silent["flags"] == ["no-carrier"]
    lines = list(csv_rows(readings, None))
    assert not any(word in line.lower() for line in lines for word in ("nan", "inf", "none"))
    assert dict(zip(KEYS, next(csv.reader([lines[1]])), strict=True))["swr"] == ""


@given(st.lists(st.floats(width=64), min_size=1, max_size=5), st.lists(st.floats(width=64), min_size=5, max_size=5))
def test_any_numbers_give_rows(forward, reflected):
    """Rows are valid whatever a column holds: infinite and not a number too."""
    n = len(forward)
    readings = uncalibrated(forward, reflected[:n])
    readings.rho = np.array(reflected[:n])
    readings.forward_w = np.array(forward)
    for row in json_rows(TimedReadings(readings, np.full(n, np.inf), np.ones(n, dtype=int)), "x"):
        assert list(json.loads(row, parse_constant=pytest.fail)) == KEYS


def test_flags_are_a_list_and_words_with_spaces():
    """Flags are a list of names in JSON, and names parted by a space in CSV."""
    readings = batch(5.0, 2.0, checked=False, simulated=True)
    assert json.loads(next(json_rows(readings, "x")))["flags"] == ["no-carrier", "unchecked", "simulated"]
    assert next(csv_rows(readings, "x")).endswith(",x,no-carrier unchecked simulated")


@pytest.mark.parametrize(
    ("time_s", "text"),
    [
        (0.0, "1970-01-01T00:00:00.000Z"),
        (1764579600.0004, "2025-12-01T09:00:00.000Z"),
        (1764579600.0006, "2025-12-01T09:00:00.001Z"),
        (1764579599.9996, "2025-12-01T09:00:00.000Z"),
        (2147483648.25, "2038-01-19T03:14:08.250Z"),
        (np.nan, None),
        (np.inf, None),
    ],
)
def test_times_are_utc_with_milliseconds(time_s, text):
    """RFC 3339 with milliseconds and Z, rounded to the nearest, unknown where it is unknown."""
    assert rfc3339(time_s) == text


@given(st.integers(0, 4_000_000_000_000))
def test_every_millisecond_is_written_exactly(ms):
    """A time of whole milliseconds is written as those milliseconds."""
    assert rfc3339(ms / 1000.0).endswith(f".{ms % 1000:03d}Z")


# Names from outside


def bridge_cell(name):
    """The bridge's cell of a CSV row, as a reader of CSV finds it."""
    (line,) = csv_rows(batch(1100.0, 300.0), name)
    (cells,) = csv.reader(io.StringIO(line + "\n"))
    assert len(cells) == len(KEYS)
    return cells[KEYS.index("bridge")]


@pytest.mark.parametrize("name", ["a,b", 'say "73"', "plain", "Brücke", 'a,"b",c', '"'])
def test_csv_quotes_what_needs_it(name):
    """Commas and quotes in a name survive a reader of CSV."""
    assert bridge_cell(name) == name


@pytest.mark.parametrize("name", ["=1+1", "+1", "-1", "@SUM(A1)", "\uff1d1+1", '=HYPERLINK("x","y")'])
def test_cell_like_a_formula_is_inert(name):
    """A name that a spreadsheet would run stands behind an apostrophe."""
    assert bridge_cell(name) == f"'{name}"


@given(st.text(max_size=30))
@example("\x7f\x1b[2J\x9b\u202e\n")
def test_no_name_drives_a_terminal(name):
    """Whatever a bridge is called, rows hold only printable characters, and a CSV row stays one line."""
    readings = batch(1100.0, 300.0)
    (row,), (line,) = json_rows(readings, name), csv_rows(readings, name)
    assert row.isprintable()
    assert line.isprintable()
    assert json.loads(row)["bridge"] == name
    assert len(next(csv.reader([line]))) == len(KEYS)


@given(st.text(st.characters(categories=["L", "N", "P", "S"]), max_size=30))
def test_ordinary_name_survives_csv(name):
    """A name of printable characters is read back as it was, but for the apostrophe before a formula."""
    assert bridge_cell(name) in (name, f"'{name}")
