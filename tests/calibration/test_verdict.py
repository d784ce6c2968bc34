"""The verdict: its arithmetic against scipy's binomial, and what it says of right, narrow and wide intervals."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import binom, binomtest

from calibration.bench import BenchRatings, BenchStep
from calibration.verdict import OUTER, Held, binomial_tail, covers_at_least, hear, verdict_on
from tests import known_loads, shed

STEP = BenchStep("load", forward=100.0, reflected=10.0, frequency_hz=14.1e6, load="100")


@pytest.mark.parametrize("count", [1, 8, 29, 150, 3000])
@pytest.mark.parametrize("probability", [0.5, 0.95])
def test_tail_is_the_binomial_distribution(count, probability):
    """Every tail agrees with scipy to ten digits, also with thousands of steps."""
    for most in {0, 1, count // 2, count - 1, count}:
        assert binomial_tail(most, count, probability) == pytest.approx(binom.cdf(most, count, probability), rel=1e-10)


@pytest.mark.parametrize(("inside", "count"), [(0, 5), (1, 5), (5, 5), (8, 8), (27, 30), (150, 150)])
def test_excluded_coverage_is_clopper_pearsons(inside, count):
    """The lower limit is that of the exact one-sided test; eight of eight exclude coverage below 69 %."""
    exact = binomtest(inside, count, alternative="greater").proportion_ci(0.95, method="exact").low
    assert covers_at_least(inside, count) == pytest.approx(exact, abs=1e-9)
    assert round(100 * covers_at_least(8, 8)) == 69


def held(positions, half=0.1):
    """Steps whose truth lies at parts of the half-width from the value, at the middle of their intervals."""
    return [
        Held(1, STEP, 0.5 + p * half, 0.5 + p * half, 0.5 + p * half, 0.5, 0.5 - half, 0.5 + half) for p in positions
    ]


def test_chance_angle_is_called_about_right_as_often_as_it_should():
    """Cosines of uniform angles, 20 a bench: in at most 8 of 100 benches a word is said against right intervals."""
    angles = np.random.default_rng(5).uniform(0.0, 2.0 * np.pi, (400, 20))
    words = [verdict_on(held(0.99 * np.cos(own))).word for own in angles]
    wrong = 1.0 - words.count("about right") / len(words)
    print(f"{100 * wrong:.1f} % of right benches are blamed")
    assert wrong < 0.08


def test_truth_that_keeps_to_the_middle_is_called_wider_than_needed():
    """Half the leak that was allowed for shows with eight loads; and is not said of powers, which share an error."""
    own = held(0.5 * np.cos(np.arange(8.0)))
    verdict = verdict_on(own)
    assert verdict.word == "wider than needed"
    assert (verdict.outer, verdict.positions) == (0, 8)
    assert verdict.outer_chance == pytest.approx(2.0**-8)
    assert verdict_on(own, of_power=True).positions == 0
    assert pytest.approx(np.cos(np.pi / 4)) == OUTER


def test_few_outside_are_no_proof_but_many_are():
    """One of eight outside happens in 34 of 100 right benches; three of eight in less than one."""
    assert verdict_on(held([0.9] * 7 + [1.3])).word == "not told"
    narrow = verdict_on(held([0.9] * 5 + [1.3] * 3))
    assert narrow.word == "too narrow"
    assert narrow.chance == pytest.approx(binom.cdf(5, 8, 0.95))


def test_interval_cut_at_an_end_has_no_position():
    """Neither an interval from 0 nor one without an upper end is asked where its truth lies, but both are counted."""
    cut = [Held(1, STEP, 0.0, 0.0, 0.0, 0.02, 0.0, 0.05), Held(2, STEP, 1.0, 1.0, 1.0, 0.98, 0.9, np.inf)]
    verdict = verdict_on(cut)
    assert (verdict.inside, verdict.count, verdict.positions) == (2, 2, 0)
    assert np.isnan(verdict.median_position)


def test_loads_own_range_is_that_of_its_parts():
    """100 ohm of 1 % stands for SWR 1.98 to 2.02; where only it saves a step, the step is not strictly inside."""
    bridge = shed.fitted(12).bridge
    step = replace(shed.sheet(12).steps[35], load="100", line_deg=0.0, line_loss_db=None, load_nh=0.0, load_pf=0.0)
    (one,) = hear(bridge, [step], BenchRatings(resistor_pct=1.0)).loads
    swr = [(1 + rho) / (1 - rho) for rho in (one.truth_low, one.truth, one.truth_high)]
    assert swr == pytest.approx([1.981, 2.0, 2.019], abs=0.001)
    edge = replace(one, low=one.truth + 1e-4, high=1.0)
    assert edge.inside
    assert not edge.strictly
    assert hear(bridge, [replace(step, load="open")], BenchRatings()).loads[0].truth == 1.0


@pytest.mark.parametrize("bits", [12, 16])
def test_shed_bridge_is_found_wide_and_never_narrow(bits):
    """150 loads of known truth: all inside, none of them fitted on; the dummy's bound makes the intervals wide."""
    heard = hear(shed.fitted(bits).bridge, known_loads.load_steps(bits), BenchRatings(), shed.sheet(bits).steps)
    verdict = verdict_on(heard.loads)
    print(f"{bits} bit: {verdict}")
    assert verdict.count == 150
    assert verdict.inside >= 145
    assert verdict.word == "wider than needed"
    assert verdict.median_position < 0.4


def test_narrowed_intervals_are_found_too_narrow():
    """The same bridge with a fifth of its leakage limits and the same values: thirty loads give it away."""
    bridge = shed.fitted(12).bridge
    boast = replace(bridge, bands=tuple(narrowed(band) for band in bridge.bands))
    verdict = verdict_on(hear(boast, known_loads.load_steps(12, slice(0, 30)), BenchRatings()).loads)
    print(f"narrowed: {verdict}")
    assert verdict.word == "too narrow"
    assert verdict.chance < 1e-3


def narrowed(band):
    """A band that promises a fifth of its leakage."""
    return replace(band, directivity_limit=band.directivity_limit / 5, forward_leak_limit=band.forward_leak_limit / 5)


def test_powers_are_held_against_the_wattmeter():
    """Power steps by watts or volts, each with the wattmeter's own accuracy as told; a reading 20 % off is outside."""
    bridge = shed.fitted(12).bridge
    ratings = BenchRatings(reference_pct=5.0)
    heard = hear(bridge, known_loads.power_steps(), ratings)
    assert verdict_on(heard.powers, of_power=True).inside == len(heard.powers) == 23
    step = known_loads.power_steps()[3]
    volts = replace(step, power_w=None, volts=float(np.sqrt(50.0 * step.power_w)), volts_kind="rms")
    far = replace(step, power_w=1.2 * step.power_w, power_pct=1.0)
    full = replace(ratings, reference_full_scale_w=100.0)
    same, off = hear(bridge, [volts, far], ratings).powers
    assert same.truth == pytest.approx(step.power_w)
    assert not off.inside
    assert off.truth_high == pytest.approx(1.01 * far.power_w)
    assert hear(bridge, [step], full).powers[0].truth_high == pytest.approx(step.power_w + 5.0)


def test_what_cannot_be_judged_is_left_out_with_a_reason():
    """Dark, reversed, fitted, out of band, silent and clipped steps are named by place; nothing is dropped unsaid."""
    sheet = shed.sheet(12)
    load = next(step for step in sheet.steps if step.kind == "load")
    turned = next(step for step in sheet.steps if step.kind == "reversed")
    steps = [sheet.steps[0], turned, load, replace(load, frequency_hz=144e6), replace(load, forward=5.2)]
    steps += [replace(load, reflected=4094.0)]
    heard = hear(shed.fitted(12).bridge, steps, BenchRatings(), [load])
    assert not heard.loads
    assert [number for number, _ in heard.left_out] == [1, 2, 3, 4, 5, 6]
    reasons = " ".join(why for _, why in heard.left_out)
    for words in ("dark step", "reversed step", "fitted on", "no band", "no carrier", "at its end"):
        assert words in reasons
