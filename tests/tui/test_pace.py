"""From which age a reading is old: by the bridge's period, else by what was seen of it."""

import pytest

from tui.pace import Pace, stale_after_s


@pytest.mark.parametrize(("period_ms", "age_s"), [(10.0, 0.25), (50.0, 0.25), (100.0, 0.3), (2000.0, 6.0)])
def test_stale_after_three_periods_or_a_quarter_second(period_ms, age_s):
    """Whichever is longer, whatever was seen."""
    assert stale_after_s(period_ms) == pytest.approx(age_s)
    assert stale_after_s(period_ms, 7.0) == pytest.approx(age_s)


@pytest.mark.parametrize(("spacing_s", "age_s"), [(None, 1.0), (0.01, 0.25), (0.5, 1.5), (3.0, 9.0)])
def test_stale_without_a_period_is_by_the_spacing_seen(spacing_s, age_s):
    """Three times the median spacing, a quarter of a second at least, and a second before there is any."""
    assert stale_after_s(0.0, spacing_s) == pytest.approx(age_s)


def fed(*arrivals):
    """The spacing after these arrivals [s] of so many readings each."""
    pace = Pace()
    for at_s, readings in arrivals:
        pace.feed(at_s, readings)
    return pace.spacing_s


def test_spacing_needs_two_arrivals():
    """One reading tells no spacing, nor do any that came with it."""
    assert fed((5.0, 1)) is None
    assert fed((5.0, 9)) is None


def test_spacing_of_a_batch_is_shared_by_its_readings():
    """Ten readings in a tenth of a second are a hundred a second, however they were gathered."""
    assert fed((0.0, 10), (0.1, 10), (0.2, 10)) == pytest.approx(0.01)


def test_spacing_is_a_median_of_the_last_twenty():
    """One long pause changes nothing; another pace is followed within twenty readings."""
    steady = [(0.5 * n, 1) for n in range(30)]
    assert fed(*steady, (100.0, 1)) == pytest.approx(0.5)
    slower = [(14.5 + 2.0 * n, 1) for n in range(1, 12)]
    assert fed(*steady, *slower) == pytest.approx(2.0)
