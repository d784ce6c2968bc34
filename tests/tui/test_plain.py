"""Plain lines: one sentence a reading, complete by itself."""

import pytest

from tests.tui.fakes import below, no_carrier, reading, uncalibrated
from tui.plain import line


@pytest.mark.parametrize(
    ("made", "sentence"),
    [
        (
            reading(0.1736, "simulated"),
            "SWR 1.42, 1.35-1.50; net 48 W, 45-51; forward 49 W, 47-52; reflected 1.5 W, 1.0-2.0; simulated.",
        ),
        (no_carrier(), "SWR no carrier."),
        (uncalibrated(), "SWR uncalibrated, counts 1234 / 56."),
    ],
)
def test_line_is_this_sentence(made, sentence):
    """Value, interval, powers and remarks in a fixed order."""
    assert line(made) == sentence


def test_line_below_reading_gives_the_bound():
    """The bound is said in words, never 1.00."""
    assert line(below()).startswith("SWR below what can be read, SWR at most 1.09; net ")


def test_line_stale_says_so_first():
    """An old reading begins with the word."""
    assert line(reading(0.2, "stale")).startswith("stale; SWR ")


def test_line_is_ascii_on_one_line():
    """Fit for dumb terminals."""
    for made in (reading(), no_carrier(), uncalibrated(), below(), reading(1.02, "over-unity")):
        assert line(made).isascii()
        assert "\n" not in line(made)
