"""Bench sheets that the program writes: they read back as what was measured."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from bridgeio.bridge_file import parse_bridge_file
from bridgeio.sheet import sheet_of
from calibration.bench import BenchRatings, BenchStep


def written(steps, name="x", ratings=None, **options):
    """The bridge file read back from a sheet of these steps."""
    text = sheet_of(
        name=name, full_scale=65520, diode="schottky", ratings=ratings or BenchRatings(), steps=steps, comment="c",
        **options,
    )  # fmt: skip
    return parse_bridge_file(text, "x")


counts = st.floats(0.0, 65520.0)
positive = st.floats(1e-3, 1e6)
common = {
    "forward": counts,
    "reflected": counts,
    "forward_sd": st.floats(0.0, 100.0),
    "reflected_sd": st.floats(0.0, 100.0),
    "samples": st.integers(1, 10**6),
    "temperature_c": st.floats(-60.0, 150.0),
}
hertz = st.one_of(st.floats(1e5, 1e10), st.integers(10**5, 10**8).map(float))
step = st.one_of(
    st.builds(BenchStep, kind=st.just("dark"), **common),
    st.builds(
        BenchStep,
        kind=st.sampled_from(["power", "reversed"]),
        frequency_hz=hertz,
        power_w=positive,
        power_pct=st.none() | st.floats(0.0, 100.0),
        **common,
    ),
    st.builds(
        BenchStep,
        kind=st.just("power"),
        frequency_hz=hertz,
        volts=positive,
        volts_kind=st.sampled_from(["rms", "peak"]),
        dummy_ohm=st.none() | positive,
        **common,
    ),
    st.builds(
        BenchStep,
        kind=st.just("load"),
        frequency_hz=hertz,
        load=st.sampled_from(["24.87", "25+3.5j", "open", "short"]),
        load_pct=st.none() | st.floats(0.0, 100.0),
        load_nh=st.none() | st.floats(0.0, 100.0),
        load_pf=st.none() | st.floats(0.0, 100.0),
        line_deg=st.floats(0.0, 360.0),
        line_loss_db=st.none() | st.floats(0.0, 10.0),
        **common,
    ),
)


@given(st.lists(step, max_size=4))
def test_sheet_reads_back_as_its_steps(steps):
    """Every step comes back exactly, whatever was told of it."""
    assert written(steps).steps == tuple(steps)


@given(st.text(st.characters(exclude_categories=["Cs"]), min_size=1, max_size=50))
def test_sheet_keeps_any_name(name):
    """Quotes, backslashes and control characters in a name are kept, and break nothing."""
    assert written([], name=name).name == name


def test_sheet_keeps_ratings_and_device_id():
    """How far the references can be believed, and for which board it is, are written too."""
    ratings = BenchRatings(3.0, 100.0, 34.5, 2.0)
    found = written([], ratings=ratings, device_id=0x1A2B)
    assert (found.ratings, found.device_id) == (ratings, 0x1A2B)


def test_sheet_takes_numpy_numbers():
    """Means that come as numpy's numbers are written as plain ones."""
    (found,) = written([BenchStep("dark", np.float64(12.25), np.float64(200000.0 / 7.0))]).steps
    assert (found.forward, found.reflected) == (12.25, 200000.0 / 7.0)


@pytest.mark.parametrize("comment", ["one line", "two\nlines", "an end\r\n[bridge]"])
def test_comment_stays_a_comment(comment):
    """A comment of several lines is commented out on each."""
    text = sheet_of(
        name="x", full_scale=4095, diode=None, ratings=BenchRatings(), steps=[], comment=comment
    )  # fmt: skip
    assert parse_bridge_file(text, "x").name == "x"
