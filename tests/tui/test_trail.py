"""The trail: the thread, the best point, distance and direction by the noise alone."""

import itertools
import math
import random

import pytest
from hypothesis import given
from hypothesis import strategies as st

from tui.sample import Sample
from tui.trail import SPAN_S, Trail


def followed(rhos, step_s=0.05, flags=()):
    """A trail that was fed these reflections."""
    trail = Trail()
    for n, rho in enumerate(rhos):
        trail.feed(Sample(n * step_s, rho, 50.0, frozenset(flags)))
    return trail


def noisy(rho, sd, count, seed=1):
    """Readings of one load."""
    spread = random.Random(seed)
    return [rho + spread.gauss(0.0, sd) for _ in range(count)]


def test_best_a_single_low_reading_does_not_decide():
    """One damaged frame is no best point."""
    assert followed([0.3, 0.3, 0.01, 0.3, 0.3]).relation().best == 0.3


@given(st.lists(st.floats(0.0, 1.0), min_size=2, max_size=60))
def test_best_any_readings_is_the_lowest_that_two_neighbours_reach(rhos):
    """The best is the least maximum of two neighbours."""
    assert followed(rhos).relation().best == min(max(pair) for pair in itertools.pairwise(rhos))


def test_best_clipped_readings_are_no_best():
    """A clipped reflected detector hides reflection."""
    assert followed([0.1] * 5, flags=["clipped"]).relation().best is None


def test_forget_begins_anew_and_keeps_the_thread():
    """The best is forgotten, the thread stays."""
    trail = followed([0.1] * 5 + [0.3])
    trail.forget()
    assert trail.relation().best is None
    assert len(list(trail.bins())) > 0
    for n in range(2):
        trail.feed(Sample(1.0 + n, 0.3, 50.0, frozenset()))
    assert trail.relation().best == 0.3


@pytest.mark.parametrize("sd", [0.0005, 0.002, 0.01])
@pytest.mark.parametrize("speed", [0.0, 0.02])
def test_noise_is_that_of_a_reading_even_while_the_knob_turns(sd, speed):
    """The repeatability is found within 40 % from 200 readings, also on a steady slope."""
    rhos = [rho + speed * n / 20 for n, rho in enumerate(noisy(0.3, sd, 200))]
    trail = followed(rhos, step_s=0.004)
    assert trail.relation().noise == pytest.approx(sd, rel=0.4)


def test_away_within_noise_is_at_the_best():
    """Noise does not take a reading away from the best it has just reached."""
    assert followed([0.3] * 20).relation().away == 0.0
    assert followed([0.1, 0.1, *noisy(0.3, 0.001, 30)]).relation().away == pytest.approx(0.2, abs=0.005)


def test_direction_follows_the_knob():
    """Falling reflection is towards, rising away, noise alone steady."""
    steps = [0.002 * n for n in range(20)]
    noise = noisy(0.3, 0.001, 20)
    assert followed([rho - step for rho, step in zip(noise, steps, strict=True)]).relation().direction == -1
    assert followed([rho + step for rho, step in zip(noise, steps, strict=True)]).relation().direction == 1
    assert followed(noise).relation().direction == 0
    assert followed([0.3] * 3).relation().direction is None


def test_direction_steady_load_is_steady_nearly_always():
    """On noise alone a direction is told in fewer than 1 of 50 moments (3 sd)."""
    trail, told = Trail(), 0
    for n, rho in enumerate(noisy(0.3, 0.002, 2000)):
        trail.feed(Sample(n * 0.05, rho, 50.0, frozenset()))
        told += trail.relation().direction not in (0, None)
    assert told < 40


def test_feed_unplaced_reading_leaves_a_gap():
    """Without carrier there is no place, and the thread does not run through the silence."""
    trail = followed([0.3, 0.3])
    trail.feed(Sample(0.10, math.nan, 0.0, frozenset({"no-carrier"})))
    assert math.isnan(trail.relation().away)
    trail.feed(Sample(0.12, 0.3, 50.0, frozenset()))
    assert next(iter(trail.bins())).from_s == 0.12


def test_feed_weak_readings_leave_the_trail_alone():
    """Between syllables, a reading too weak to say anything is neither best nor a break in the thread."""
    trail = followed([0.3, 0.3])
    for n in range(2):
        trail.feed(Sample(0.10 + 0.05 * n, 0.0, 0.1, frozenset({"below-reading"}), weak=True))
    assert trail.relation().best == 0.3
    assert trail.relation().away == 0.0


def test_feed_below_reading_stands_at_the_left_end():
    """Too little to read is at the left end of the axis."""
    trail = followed([math.nan] * 3, flags=["below-reading"])
    assert next(iter(trail.bins())).low == 0.0


def test_feed_a_thousand_a_second_is_bounded_and_keeps_extremes():
    """A minute at any rate takes at most ten bins a second, and each keeps its lowest and highest reading."""
    trail = followed([0.3 + 0.1 * math.sin(n / 7) for n in range(70_000)], step_s=0.001)
    bins = list(trail.bins())
    assert len(bins) <= SPAN_S / 0.1 + 2
    assert min(each.low for each in bins) == pytest.approx(0.2, abs=0.001)
    assert max(each.high for each in bins) == pytest.approx(0.4, abs=0.001)
    assert bins[0].to_s - bins[-1].to_s <= SPAN_S
