"""The counts of the last second: mean, noise, spread, and when they are too old or say nothing of the converter."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from bridgeio.frames import Crest, Tallies
from bridgeio.recent import BINS, RecentCounts, counting_step_sd


def tallies(forward, reflected=None):
    """Tallies of these counts, one a millisecond."""
    return Tallies.of(
        np.arange(len(forward)), np.arange(len(forward)), forward, forward if reflected is None else reflected
    )


def facts_of(forward):
    """Forward facts of counts that came together."""
    recent = RecentCounts()
    recent.take([tallies(np.asarray(forward))], 0.0)
    return recent.facts()[0]


def crest(forward_mean, reflected_mean):
    """A crest frame with these means."""
    return Crest(0, 0, forward_mean, reflected_mean, forward_mean, reflected_mean, 16, 0)


def test_nothing_seen_has_no_facts():
    """Before the first count there is nothing to say."""
    assert RecentCounts().facts() is None


def test_noise_is_that_of_single_readings():
    """Normal noise of sd 3 is found within what 20000 readings allow."""
    counts = 5000.0 + 3.0 * np.random.default_rng(1).standard_normal(20_000)
    assert facts_of(counts).noise == pytest.approx(3.0, rel=0.03)


def test_noise_of_a_turned_knob_is_still_that_of_the_readings():
    """A slope of thirty times the noise over the second hardly raises it."""
    counts = 5000.0 + np.linspace(0.0, 90.0, 100) + 3.0 * np.random.default_rng(2).standard_normal(100)
    facts = facts_of(counts)
    assert facts.noise == pytest.approx(3.0, rel=0.3)
    assert np.std(counts) > 20.0


def test_noise_of_one_reading_is_not_known():
    """One count has no scatter."""
    assert math.isnan(facts_of([7.0]).noise)


def test_old_counts_go_when_a_second_is_full():
    """At a hundred a second only the last second counts."""
    recent = RecentCounts()
    for n in range(300):
        recent.take([tallies([float(n)])], n / 100)
    facts = recent.facts()[0]
    assert facts.high == 299.0
    assert 299.0 - facts.low == pytest.approx(100.0, abs=2.0)


def test_slow_bridge_is_judged_by_its_last_twenty():
    """Two a second: twenty counts are kept, of ten seconds, and none that is older than a minute."""
    recent = RecentCounts()
    for n in range(100):
        recent.take([tallies([float(n)])], n / 2)
    assert recent.facts()[0].readings == 20
    recent.take([tallies([0.0])], 1000.0)
    assert recent.facts()[0].readings == 1


def test_crest_means_count_only_without_tallies():
    """A bridge that sends crests alone has counts too; where tallies come they are the counts."""
    recent = RecentCounts()
    recent.take([crest(100, 10), crest(104, 12)], 0.0)
    forward, reflected = recent.facts()
    assert (forward.mean, reflected.mean) == (102.0, 11.0)
    recent.take([tallies([500.0]), crest(100, 10)], 0.1)
    assert recent.facts()[0].mean == 500.0


def test_forget_begins_afresh():
    """After a loss the counts of the old board are gone."""
    recent = RecentCounts()
    recent.take([tallies([1.0])], 0.0)
    recent.forget()
    assert recent.facts() is None


@given(st.lists(st.integers(0, 70_000), min_size=1, max_size=200), st.sampled_from([0.0, 0.25]))
def test_bars_hold_every_count(counts, fraction):
    """However counts lie, each is in one of at most BINS bars, and the ends are filled."""
    facts = facts_of([count + fraction * (n % 2) for n, count in enumerate(counts)])
    assert sum(facts.bars) == len(counts)
    assert 1 <= len(facts.bars) <= BINS
    assert facts.bars[0]
    assert facts.bars[-1] or facts.high - facts.low > BINS


def test_bars_of_few_whole_counts_are_one_each():
    """Three neighbouring counts are three bars."""
    assert facts_of([5.0, 6.0, 6.0, 7.0, 7.0, 7.0]).bars == (1, 2, 3)


def test_moving_is_a_signal_well_above_the_noise():
    """Speech moves the counts; noise on the dark count, however relative, does not."""
    assert facts_of([200.0, 5000.0, 900.0, 3000.0]).moving(3.0)
    assert not facts_of([2.0, 9.0, 0.0, 5.0]).moving(3.0)
    assert not facts_of([5000.0, 5010.0, 4990.0]).moving(3.0)


def test_step_of_a_sum_grows_with_its_root():
    """Rounding by one step has sd 1/sqrt(12); sixteen of them four times that; checked by drawing them."""
    assert counting_step_sd(1) == pytest.approx(0.2887, abs=1e-4)
    assert counting_step_sd(16) == pytest.approx(4 * counting_step_sd(1))
    true = np.random.default_rng(3).uniform(100.0, 200.0, (20_000, 16))
    assert np.std((np.round(true) - true).sum(axis=1)) == pytest.approx(counting_step_sd(16), rel=0.03)
