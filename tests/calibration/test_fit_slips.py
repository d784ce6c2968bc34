"""Slips of the hand: each is named by its step in a builder's words, set aside and said, and bends no result."""

import re
from dataclasses import replace

import numpy as np
import pytest

from calibration.errors import SheetError
from calibration.fit import fit
from tests import benches, shed

BANDS = [14.1e6, 3.65e6]


def fit_of(steps):
    """The fit of steps of the shed's 12-bit bench."""
    sheet = shed.sheet(12)
    return fit(steps, name="x", full_scale=4095, ratings=sheet.ratings)


def changed(**steps):
    """The shed's steps, with those named s<number as in the sheet> in place of their own."""
    found = list(shed.sheet(12).steps)
    for name, step in steps.items():
        found[int(name[1:]) - 1] = step
    return found


def own(number):
    """A step of the shed by its number in the sheet."""
    return shed.sheet(12).steps[number - 1]


def counted(as_written, as_taken):
    """A step written down as one, with the counts of another."""
    return replace(as_written, forward=as_taken.forward, reflected=as_taken.reflected)


SLIPS = {
    "tenfold": ({"s4": replace(own(4), power_w=10.97)}, "step 4: power_w 10.97 looks mistyped: the counts fit 1.1 W"),
    "a tenth": ({"s15": replace(own(15), power_w=5.349)}, "step 15: power_w 5.349 looks mistyped: the counts fit 52 W"),
    "reversed tenfold": ({"s27": replace(own(27), power_w=203.4)}, "step 27: power_w 203.4 looks mistyped"),
    "digit": ({"s7": replace(own(7), power_w=36.27)}, "step 7: power_w 36.27 does not fit: the counts fit 30 W"),
    "exchanged power": ({"s6": benches.exchanged(own(6))}, "step 6: .*forward and reflected look exchanged"),
    "exchanged at dark": ({"s2": benches.exchanged(own(2))}, "step 2: forward and reflected look exchanged"),
    "exchanged reversed": ({"s28": benches.exchanged(own(28))}, "step 28: .*forward and reflected look exchanged"),
    "exchanged load": ({"s43": benches.exchanged(own(43))}, "step 43: forward and reflected look exchanged"),
    "power turned": (
        {"s5": replace(own(26), kind="power")},
        "step 5: .*the bridge looks turned as for a reversed step",
    ),
    "reversed forward": (
        {"s27": replace(own(6), kind="reversed")},
        "step 27: .*the bridge looks turned as for a power step",
    ),
    "full scale": ({"s9": replace(own(9), forward=4095.0)}, "step 9: forward 4095 is saturated"),
    "short of it": ({"s9": replace(own(9), forward=2700.0)}, "step 9: forward 2700 looks saturated: .* stop at 79 W"),
    "loads exchanged": (
        {"s42": counted(own(42), own(43)), "s43": counted(own(43), own(42))},
        "steps 42 and 43: loads 25 and 100 look exchanged",
    ),
    "other load": ({"s45": counted(own(45), own(44))}, "step 45: load 150 looks like 16.67 was connected"),
    "unknown load": ({"s37": replace(own(37), reflected=390.0)}, "step 37: load 150 does not fit: .* or 193 ohm"),
}
AT_PUSH = ("full scale",)


def agree(found, without):
    """Whether two bridges agree within half a 95 % limit of theirs."""
    for one, other in zip(found.bridge.bands, without.bridge.bands, strict=True):
        sds = np.sqrt(np.diag(other.covariance))[:2]
        gains = [(one.gain_forward, other.gain_forward), (one.gain_reflected, other.gain_reflected)]
        assert (np.abs([np.log(a / b) for a, b in gains]) <= sds).all()
        assert one.directivity_limit == pytest.approx(other.directivity_limit, rel=0.05)
        assert one.forward_leak_limit == pytest.approx(other.forward_leak_limit, rel=0.1)


@pytest.mark.parametrize(
    "slip", [name if name in AT_PUSH else pytest.param(name, marks=pytest.mark.long) for name in SLIPS]
)
def test_slip_is_named_and_bends_nothing(slip):
    """One wrong step of the shed's sheet is named, is the only one, and the rest is as if it had never been taken."""
    steps, words = SLIPS[slip]
    found = fit_of(changed(**steps))
    print(*[one.words for one in found.slips], sep="\n")
    assert {f"s{n + 1}" for one in found.slips for n in one.steps} == set(steps)
    assert len(found.slips) == 1
    assert re.search(words, found.slips[0].words)
    assert found.notes[0].startswith(found.slips[0].words)
    aside = {step for one in found.slips for step in one.steps}
    agree(found, fit_of([step for n, step in enumerate(changed(**steps)) if n not in aside]))


@pytest.mark.parametrize(
    ("slip", "words"),
    [
        (
            lambda step: replace(step, power_w=10 * step.power_w),
            "step 5: power_w .* looks mistyped: the counts fit 3.1 W",
        ),
        (benches.exchanged, "step 5: .*forward and reflected look exchanged"),
    ],
)
def test_slip_on_a_bench_of_one_band_is_named(slip, words):
    """Fourteen steps of a random bridge on one band are enough to name one wrong power step."""
    chance = np.random.default_rng(11)
    truth = benches.random_truth(chance, BANDS[:1])
    steps = benches.steps_of(truth, chance, BANDS[:1], loads=benches.DIRECT)
    steps[4] = slip(steps[4])
    found = fit(steps, name="x", full_scale=benches.FULL_SCALE, ratings=benches.RATINGS)
    print(*[one.words for one in found.slips], sep="\n")
    assert len(found.slips) == 1
    assert re.search(words, found.slips[0].words)


def test_bridge_turned_throughout_is_refused():
    """All steps with forward and reflected exchanged: wiring, or the whole bridge the wrong way round."""
    with pytest.raises(SheetError, match=r"in 23 of 23 power steps .* exchanged throughout; either the bridge stands"):
        fit_of([benches.exchanged(step) for step in shed.sheet(12).steps])


def test_power_and_reversed_exchanged_throughout_is_refused():
    """All power steps taken reversed and the other way round, loads as they should be."""
    kinds = {"power": "reversed", "reversed": "power"}
    steps = [replace(step, kind=kinds.get(step.kind, step.kind)) for step in shed.sheet(12).steps]
    with pytest.raises(SheetError, match="but not in the load steps: power and reversed steps look exchanged"):
        fit_of(steps)


@pytest.mark.long
def test_one_resistor_that_is_another_everywhere_is_named():
    """A resistor of 118 ohm used as 100 in every band is found by its value, with all its steps."""
    chance = np.random.default_rng(5)
    truth = benches.random_truth(chance, BANDS)
    benches.OHMS, usual = {**benches.OHMS, "100": 118.0}, benches.OHMS
    try:
        steps = benches.steps_of(truth, chance, BANDS)
    finally:
        benches.OHMS = usual
    found = fit(steps, name="x", full_scale=benches.FULL_SCALE, ratings=benches.RATINGS)
    print(*[slip.words for slip in found.slips], sep="\n")
    (slip,) = found.slips
    assert {steps[n].load for n in slip.steps} == {"100"}
    assert "load 100 is another: the counts fit 11" in slip.reason


@pytest.mark.parametrize("bits", [12, 16])
def test_good_sheets_of_the_shed_show_no_slip(bits):
    """The circuit-simulated sheets are free of slips, and are found so."""
    assert shed.fitted(bits).slips == ()


@pytest.mark.parametrize("seed", [0, 1, *(pytest.param(n, marks=pytest.mark.long) for n in range(2, 30))])
def test_good_random_bench_shows_no_slip(seed):
    """Random bridges with noise, scatter and parts within their tolerance raise no false alarm; limits hold."""
    chance = np.random.default_rng(seed)
    truth = benches.random_truth(chance, BANDS)
    steps = benches.steps_of(truth, chance, BANDS)
    found = fit(steps, name="x", full_scale=benches.FULL_SCALE, ratings=benches.RATINGS)
    assert found.slips == ()
    for place, band in enumerate(found.bridge.bands):
        assert band.directivity_limit > abs(truth.d[1 - place])
        assert band.forward_leak_limit > abs(truth.c[1 - place])
