"""Samples: the plain numbers of a reading, and which of them are too weak to say anything."""

import math

import pytest

from tests.tui.fakes import below, no_carrier, reading, uncalibrated
from tui.sample import Sampler


def weak(*powers, step_s=0.05):
    """Whether the last of these forward powers is weak."""
    sampler = Sampler()
    return [sampler.take(n * step_s, reading(0.2, forward=power)).weak for n, power in enumerate(powers)][-1]


def test_take_below_a_fifth_of_the_crest_is_weak():
    """SWR is judged only above a fifth of the transmission's crest."""
    assert not weak(50.0, 50.0, 10.1)
    assert weak(50.0, 50.0, 9.9)


def test_take_one_wild_power_mutes_nothing():
    """The crest is what two neighbours both reach: a single damaged power does not make the rest weak."""
    assert not weak(50.0, 9999.0, 50.0)
    assert weak(50.0, 9999.0, 9999.0, 50.0)


def test_take_new_transmission_has_its_own_crest():
    """After more than the hang time without a carrier a lower power is not weak."""
    sampler = Sampler()
    for n in range(3):
        sampler.take(0.05 * n, reading(forward=100.0))
    assert sampler.take(0.2, reading(forward=5.0)).weak
    assert not sampler.take(2.0, reading(forward=5.0)).weak


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
def test_take_gives_carrier_and_place(made, carrier, place):
    """Whether a carrier is there, and where on the rho axis the reading stands, or that nothing can be said."""
    taken = Sampler().take(0.0, made)
    assert taken.carrier is carrier
    assert taken.place == pytest.approx(place, nan_ok=True)
