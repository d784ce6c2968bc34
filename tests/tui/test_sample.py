"""Samples: the plain numbers of a reading, and which of them are too weak to say anything."""

import math

import pytest

from tests.tui.fakes import below, no_carrier, reading, together, uncalibrated
from tui.sample import Sampler


def take(sampler, at_s, made):
    """The one sample of a reading."""
    (sample,) = sampler.samples(at_s, made)
    return sample


def weak(*powers, step_s=0.05):
    """Whether the last of these forward powers is weak."""
    sampler = Sampler()
    return [take(sampler, n * step_s, reading(0.2, forward=power)).weak for n, power in enumerate(powers)][-1]


def test_samples_below_a_fifth_of_the_crest_is_weak():
    """SWR is judged only above a fifth of the transmission's crest."""
    assert not weak(50.0, 50.0, 10.1)
    assert weak(50.0, 50.0, 9.9)


def test_samples_one_wild_power_mutes_nothing():
    """The crest is what two neighbours both reach: a single damaged power does not make the rest weak."""
    assert not weak(50.0, 9999.0, 50.0)
    assert weak(50.0, 9999.0, 9999.0, 50.0)


def test_samples_new_transmission_has_its_own_crest():
    """After more than the hang time without a carrier a lower power is not weak."""
    sampler = Sampler()
    for n in range(3):
        take(sampler, 0.05 * n, reading(forward=100.0))
    assert take(sampler, 0.2, reading(forward=5.0)).weak
    assert not take(sampler, 2.0, reading(forward=5.0)).weak


@pytest.mark.parametrize(
    ("made", "carrier", "place"),
    [
        (reading(0.2), True, 0.2),
        (reading(1.02, "over-unity"), True, 1.0),
        (below(), True, 0.0),
        (no_carrier(), False, math.nan),
        (uncalibrated(), None, math.nan),
        (reading(0.2, "stale"), None, math.nan),
    ],
)
def test_samples_gives_carrier_and_place(made, carrier, place):
    """Whether a carrier is there, and where on the rho axis the reading stands, or that nothing can be said."""
    taken = take(Sampler(), 0.0, made)
    assert taken.carrier is carrier
    assert taken.place == pytest.approx(place, nan_ok=True)


def test_samples_of_a_batch_are_those_of_its_readings():
    """Readings that came together give what they would give one by one, in order."""
    made = [reading(0.2), no_carrier(), reading(0.3, "clipped"), below(), reading(0.25, forward=4.0)]
    one_by_one, at_once = Sampler(), Sampler()
    assert repr(list(at_once.samples(1.0, together(*made)))) == repr([take(one_by_one, 1.0, each) for each in made])
