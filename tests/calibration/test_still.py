"""A window of counts judged: each test by counts made for it, without chance."""

import numpy as np
import pytest

from calibration.still import Converter, Window, moved_between, why_not_steady

CONVERTER = Converter.of(4095, (0.0, 0.0), (1.0, 1.0))
N, RATE = 101, 100.0
SECONDS = np.arange(N) / RATE
#: Scatter of 1 count that is neither slope nor slow: + - + - ...
FLICKER = np.where(np.arange(N) % 2, -1.0, 1.0)


def window(forward, reflected=10.0, *, flags=0.0, converter=CONVERTER):
    """A second of these counts."""
    columns = (SECONDS, forward, reflected, flags)
    return Window.of(np.stack([np.broadcast_to(one, N) for one in columns], axis=1).astype(float), converter)


def said(forward, **options):
    """Why such a window is not steady."""
    return why_not_steady(window(forward, **options), CONVERTER)


def test_flicker_about_a_mean_is_steady():
    """Counts that scatter as the converter does, and only so, pass."""
    assert said(1000.0 + FLICKER) == ""


@pytest.mark.parametrize(("part", "words"), [(0.0025, "forward drifts +2.5 counts a second (+0.2 %)"), (0.0015, "")])
def test_drift_that_is_found_is_told_from_where_it_matters(part, words):
    """With hardly any noise 0.25 % a second is a drift, 0.15 % does not matter."""
    assert said(1000.0 * (1.0 + part * (SECONDS - 0.5)) + 0.1 * FLICKER) == words


@pytest.mark.parametrize(("sds", "drifts"), [(2.3, True), (1.5, False)])
def test_drift_that_cannot_be_excluded_is_no_steadiness(sds, drifts):
    """Where few counts are above dark, a slope of 2.3 sd is not yet found and no longer excluded by a short window."""
    rows = np.stack([SECONDS, FLICKER, FLICKER, 0.0 * SECONDS], axis=1)[:51]
    slope_sd = Window.of(rows, CONVERTER).drift_sd[0]
    rows[:, 1] += sds * slope_sd * rows[:, 0]
    assert ("drifts" in why_not_steady(Window.of(rows, CONVERTER), CONVERTER)) == drifts


def test_slow_swing_is_wandering():
    """Five swings a second of 3 counts have no slope and little scatter, and are no noise."""
    assert said(1000.0 + 3.0 * np.cos(2.0 * np.pi * 5.0 * SECONDS)).startswith("forward wanders by 2.")


def test_slow_swing_that_does_not_matter_is_let_pass():
    """The same of 0.3 counts is as certain and matters to nobody."""
    swing = window(1000.0 + 0.3 * np.cos(2.0 * np.pi * 5.0 * SECONDS))
    assert swing.wander[0] > 4.0
    assert why_not_steady(swing, CONVERTER) == ""


def test_scatter_is_measured_against_the_converter_and_the_counts():
    """8 counts are too much of 100, and no more than a part of 2000."""
    assert said(100.0 + 8.0 * FLICKER) == "forward scatters 8.1 counts; the converter should give at most 5.0"
    assert said(2000.0 + 8.0 * FLICKER) == ""


def test_means_that_differ_by_more_than_their_noise_are_told():
    """One count in a thousand is more than the noise of a hundred readings; a tenth of one is not."""
    first = window(1000.0 + FLICKER)
    assert moved_between(first, window(1001.0 + FLICKER)) == "forward moved from one window to the next"
    assert moved_between(first, window(1000.1 + FLICKER)) == ""
    assert moved_between(first, window(1000.0 + FLICKER, 12.0)) == "reflected moved from one window to the next"


def test_counts_that_never_change_still_have_the_converters_step():
    """Where every count is the same, slope and mean are known to the step only, 1/sqrt(12) and 1/pi count."""
    still = window(1000.0)
    spread = ((SECONDS - SECONDS.mean()) ** 2).sum()
    assert still.drift_sd[0] == pytest.approx(1.0 / np.sqrt(12.0 * spread))
    assert still.mean_sd[0] == pytest.approx(1.0 / np.pi)
    assert moved_between(still, window(1001.0)) == ""


def test_slope_and_its_sd_are_those_of_least_squares():
    """Against numpy's own straight line with its covariance."""
    forward = 1000.0 + 7.0 * SECONDS + np.random.default_rng(1).normal(0.0, 2.0, N)
    (slope, _), covariance = np.polyfit(SECONDS, forward, 1, cov=True)
    found = window(forward)
    assert found.drift[0] == pytest.approx(slope)
    assert found.drift_sd[0] == pytest.approx(np.sqrt(covariance[0, 0]), rel=0.02)


def test_wander_is_a_normal_deviate_for_noise():
    """Over many windows of white noise the von Neumann deviate has mean 0 and sd 1 (its normal approximation)."""
    chance = np.random.default_rng(2)
    deviates = np.array([window(chance.normal(0.0, 1.0, N), chance.normal(0.0, 1.0, N)).wander for _ in range(500)])
    assert deviates.mean() == pytest.approx(0.0, abs=0.15)
    assert deviates.std() == pytest.approx(1.0, abs=0.1)


def test_unknown_converter_gets_a_part_of_its_full_scale():
    """Before anything is known the scatter expected is 1/2000 of full scale, at least a count."""
    assert Converter.of(4095, None, None).sd.tolist() == pytest.approx([2.0475] * 2)
    assert Converter.of(255, None, None).sd.tolist() == [1.0, 1.0]
    assert Converter.of(4095, (5.0, 5.0), (0.0, 0.8)).sd.tolist() == [0.5, 0.8]
