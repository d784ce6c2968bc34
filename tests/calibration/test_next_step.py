"""What to measure next: its arithmetic, its respect for ratings, and that five steps by it beat five by chance."""

import time
from functools import cache

import numpy as np
import pytest

from calibration.bench import BenchRatings, BenchStep
from calibration.candidates import Candidate, Limits, candidates
from calibration.cautions import refusal
from calibration.fit import fit
from calibration.fit_model import BenchModel
from calibration.fit_search import covariance_at, solve
from calibration.foresight import Foresight
from calibration.laws import LAWS, DiodeLaw
from calibration.next_step import Aim, proposals, rank
from tests.couplers import COUPLERS, FULL_SCALE, LIMITS, RATINGS, measure, minimal, swr_interval

HZ = 14.1e6


def advice(steps, **told):
    """Advice for steps on one of the couplers."""
    return proposals(steps, full_scale=FULL_SCALE, ratings=RATINGS, limits=LIMITS, **told)


def fitted(steps):
    """The bridge that a fit of the steps gives."""
    return fit(steps, name="x", full_scale=FULL_SCALE, ratings=RATINGS).bridge


def achieved(coupler, steps, bands_hz):
    """Median width of the SWR interval over load angles and bands after a fit of `steps`; how often it holds 1.5."""
    bridge = fitted(steps)
    low, high = np.array([swr_interval(coupler, bridge, hz) for hz in bands_hz]).swapaxes(0, 1)
    return float(np.median(high - low)), float(np.mean((low <= 1.5) & (high >= 1.5)))


def by_advice(coupler, bands_hz, count, seed):
    """Steps after `count` by advice, and of each the median width promised over the one found by the next fit."""
    chance = np.random.default_rng([seed, 0])
    steps = minimal(coupler, bands_hz, chance)
    promised, kept = [], []
    for _ in range(count + 1):
        best = advice(steps).proposals[0]
        kept.append(np.median([high - low for low, high in best.now]))
        promised.append(np.median([high - low for low, high in best.after]))
        print(f"  {best.words}")
        if len(promised) <= count:
            steps.append(measure(coupler, best.candidate, chance))
    return steps, np.array(promised[:-1]) / np.array(kept[1:])


def by_chance(coupler, bands_hz, count, seed):
    """Steps after `count` drawn at random, none twice, from the candidates the advice had to choose from."""
    chance = np.random.default_rng([seed, 1])
    steps = minimal(coupler, bands_hz, chance)
    drawn = _choice(coupler, bands_hz)
    for number in chance.permutation(len(drawn))[:count]:
        steps.append(measure(coupler, drawn[number], chance))
    return steps


@cache
def _choice(coupler, bands_hz):
    steps = minimal(coupler, bands_hz, np.random.default_rng(0))
    return tuple(proposal.candidate for proposal in advice(steps).proposals)


def _told(own, others):
    best, tenth, median = np.quantile(others, [0.0, 0.1, 0.5])
    beaten = f"at least as narrow as {(others >= own).sum()} of {len(others)} by chance"
    return f"{own:.3f} wide, {beaten} (best {best:.3f}, 10 % {tenth:.3f}, median {median:.3f})"


def race(coupler, bands_hz, runs, count=5, noises=5):
    """Width by advice, widths by chance, promised over found; all intervals hold the truth as often as they should.

    The advice is the same whatever the noise, its width is not: taken is the median over `noises` benches. Where the
    dummy bounds all, sequences differ by noise alone, and one bench could be anywhere among a hundred.
    """
    print(f"\n{coupler.name}, {len(bands_hz)} band(s)")
    advised = [by_advice(coupler, bands_hz, count, seed) for seed in range(1, noises + 1)]
    ratios = advised[0][1]
    told = np.array([achieved(coupler, steps, bands_hz) for steps, _ in advised])
    print(f"  widths by advice: {np.round(told[:, 0], 3)}")
    own, own_inside = float(np.median(told[:, 0])), float(told[:, 1].mean())
    others, inside = np.transpose(
        [achieved(coupler, by_chance(coupler, bands_hz, count, seed), bands_hz) for seed in range(runs)]
    )
    print(f"  {count} steps by advice: median SWR interval {_told(own, others)}")
    print(f"  promised over found: {np.round(ratios, 3)}")
    print(
        f"  truth inside: {own_inside:.3f}; by chance {inside.mean():.3f}, least {inside.min():.3f} ({inside.argmin()})"
    )
    assert own_inside >= 0.95
    assert inside.mean() >= 0.95
    return own, others, ratios


def test_steps_by_advice_beat_chance():
    """On one coupler five steps by advice narrow more than most of three random fives, and promises are kept."""
    own, others, ratios = race(COUPLERS[0], (HZ,), 3, noises=1)
    assert (others >= own).sum() >= 2
    assert own < np.median(others)
    assert (np.abs(np.log(ratios)) < np.log(1.35)).all()


@pytest.mark.long
@pytest.mark.timeout(3000)
@pytest.mark.parametrize("coupler", COUPLERS, ids=lambda coupler: coupler.name)
def test_five_steps_by_advice_beat_ninety_of_a_hundred(coupler):
    """On each of five couplers five steps by advice narrow at least as much as 90 of 100 random fives."""
    own, others, ratios = race(coupler, (HZ,), 100)
    assert (others >= own).sum() >= 90
    assert own < np.median(others)
    assert (np.abs(np.log(ratios)) < np.log(1.35)).all()


@pytest.mark.long
@pytest.mark.timeout(3000)
@pytest.mark.parametrize("coupler", COUPLERS[:2], ids=lambda coupler: coupler.name)
def test_five_steps_over_two_bands_beat_chance(coupler):
    """The same on a bench of two bands, the median taken over both."""
    own, others, _ = race(coupler, (HZ, 28.4e6), 100)
    assert (others >= own).sum() >= 90
    assert own < np.median(others)


@cache
def looked_ahead():
    """A foresight over a bench of one band with a reversed and two load steps."""
    chance = np.random.default_rng(3)
    more = (Candidate("reversed", HZ, 1.0), Candidate("load", HZ, 3.0, "25"), Candidate("load", HZ, 3.0, "100", 45.0))
    steps = minimal(COUPLERS[0], (HZ,), chance) + [measure(COUPLERS[0], step, chance) for step in more]
    model = BenchModel(steps, RATINGS, 50.0, DiodeLaw)
    solution = solve(model)
    found = candidates(steps, LIMITS, bands_hz=[HZ])
    return steps, Foresight(model, solution, found, full_scale=FULL_SCALE), model, solution.vector


def test_foresight_knows_what_a_fit_of_the_same_steps_would():
    """The covariance after a step is the one that a model with that step has at the same vector."""
    steps, foresight, model, vector = looked_ahead()
    # Loads that are in the sheet already: a new part would lengthen the vector.
    told = [
        ("dark", None, 0.0),
        ("power", None, 0.0),
        ("reversed", None, 0.0),
        ("load", "25", 0.0),
        ("load", "100", 45.0),
    ]
    kinds = [(candidate.kind, candidate.load, candidate.line_deg) for candidate in foresight.candidates]
    for number in map(kinds.index, told):
        candidate = foresight.candidates[number]
        longer = BenchModel([*steps, foresight.step_of(candidate)], RATINGS, 50.0, DiodeLaw)
        longer.first_laws, longer.scatter = model.first_laws, model.scatter
        own = slice(0, model.loads_slice.start)
        expected = covariance_at(longer, vector)[own, own]
        got = foresight.after([number]).covariances[0][own, own]
        assert got == pytest.approx(expected, rel=1e-3, abs=1e-6 * np.abs(expected).max())


def test_foresight_takes_a_step_away_again():
    """What is known after three steps less one of them is what is known after the other two."""
    _, foresight, *_ = looked_ahead()
    loads = [n for n, candidate in enumerate(foresight.candidates) if candidate.kind == "load"][:3]
    less = foresight.without(foresight.after(loads), loads[1])
    plain = foresight.after([loads[0], loads[2]])
    assert less.chosen == plain.chosen
    for one, other in zip(less.covariances, plain.covariances, strict=True):
        assert one == pytest.approx(other, rel=1e-6, abs=1e-12)


def test_foresight_shows_the_interval_that_the_fit_has_now():
    """With no step taken the interval is the one the fitted bridge reads with, within 5 % of its width."""
    steps, foresight, *_ = looked_ahead()
    low, high = foresight.intervals(foresight.calibrated(foresight.now))[0]
    ends = swr_interval(COUPLERS[0], fitted(steps), HZ)
    swr = [(1 + rho) / (1 - rho) for rho in (low, high)]
    assert swr[1] - swr[0] == pytest.approx(np.median(ends[1] - ends[0]), rel=0.05)


def test_foreseen_steps_never_widen():
    """Where the bridge has been turned once no candidate leaves the interval wider: nothing known is lost."""
    _, foresight, *_ = looked_ahead()
    for proposal in rank(foresight):
        assert proposal.narrowing >= -1e-6


def test_loads_outrank_what_tells_nothing_of_leaks():
    """With the bridge turned once, steps that identify the leaks come before more dark, power and reversed ones."""
    chance = np.random.default_rng(4)
    steps = [*minimal(COUPLERS[0], (HZ,), chance), measure(COUPLERS[0], Candidate("reversed", HZ, 1.0), chance)]
    ranked = advice(steps).proposals
    assert [proposal.candidate.kind for proposal in ranked[:4]] == ["load"] * 4
    assert {other.kind for other in ranked[0].company} == {"load"}
    assert ranked[0].joint > 0.15


def test_balance_comes_first_where_nothing_tells_it():
    """After dark and powers alone the bridge is turned, as nothing yet tells one detector's gain from the other's."""
    best = advice(minimal(COUPLERS[2], (HZ,), np.random.default_rng(1))).proposals[0]
    assert best.candidate.kind == "reversed"
    assert best.narrowing > 0.3


@pytest.mark.parametrize(
    "limits",
    [
        LIMITS,
        Limits(),
        Limits(dummy_w=20.0, power_min_w=2.0, power_max_w=100.0),
        Limits(dummy_w=50.0, dummy_j=120.0, resistor_w=0.5, power_min_w=0.01, power_max_w=400.0, max_w=60.0),
    ],
)
def test_candidates_keep_within_the_ratings(limits):
    """No candidate is one that the cautions would refuse, and each limit that nobody named has its careful value."""
    steps = minimal(COUPLERS[0], (HZ,), np.random.default_rng(1))
    found = candidates(steps, limits)
    watts = {step.power_w for step in found if step.power_w}
    known = {float(f"{step.power_w:.2g}") for step in steps if step.power_w}
    for step in found:
        said = BenchStep(step.kind, 0.0, 0.0, step.frequency_hz, power_w=step.power_w, load=step.load)
        assert refusal(said, limits) is None
        if step.load in ("open", "short"):
            assert step.power_w <= max(1.0, limits.power_min_w or 0.0)
        elif step.kind == "load" and limits.resistor_w is None:
            assert step.power_w <= 0.25
    if limits.power_max_w is None:
        assert watts <= known
    else:
        assert max(watts) <= min(limits.power_max_w, limits.max_w or np.inf)
        assert min(watts) >= limits.power_min_w


def test_empty_sheet_gets_a_fixed_order():
    """Without a fit: dark, three powers across the range, bridge turned, two loads, the same behind line; said so."""
    got = advice([], wanted_hz=(HZ,))
    assert got.fixed
    assert "fixed order" in got.lead[0]
    steps = [proposal.candidate for proposal in got.proposals]
    assert [step.kind for step in steps] == ["dark"] + ["power"] * 3 + ["reversed"] + ["load"] * 4
    assert [step.power_w for step in steps[1:4]] == [0.1, 3.0, 100.0]
    assert [(step.load, step.line_deg) for step in steps[5:]] == [("25", 0), ("100", 0), ("25", 45), ("100", 45)]


def test_fixed_order_goes_on_where_the_sheet_ends():
    """With dark and one power taken two more powers come next; without ratings no load and no power is invented."""
    steps = minimal(COUPLERS[0], (HZ,), np.random.default_rng(1))[:2]
    got = proposals(steps, full_scale=FULL_SCALE)
    assert [p.candidate.kind for p in got.proposals] == ["power", "power", "reversed"]
    # The one power of the sheet, again, would show nothing of a law.
    assert [p.candidate.power_w for p in got.proposals[:2]] == [None, None]
    assert got.proposals[2].candidate.power_w == float(f"{steps[1].power_w:.2g}")
    assert any("resistor_w" in sentence for sentence in got.lead)
    nothing = proposals([], full_scale=FULL_SCALE)
    assert [p.candidate.power_w for p in nothing.proposals] == [None] * 5
    said = "a known power unlike the others on the band you use most into the dummy load, read the wattmeter"
    assert nothing.proposals[1].words == said


def test_wanted_band_without_power_comes_first():
    """A band that is wanted and not in the sheet gets a power step before anything is ranked."""
    steps = minimal(COUPLERS[0], (HZ,), np.random.default_rng(1))
    got = advice(steps, wanted_hz=(HZ, 7.1e6))
    first = got.proposals[0].candidate
    assert (first.kind, first.frequency_hz) == ("power", 7.1e6)
    assert any("no power step on 40 m yet" in sentence for sentence in got.lead)


def test_dummy_that_bounds_everything_is_said_first():
    """With a poor dummy and no load allowed the advice begins with the dummy load."""
    chance = np.random.default_rng(2)
    steps = [*minimal(COUPLERS[3], (HZ,), chance), measure(COUPLERS[3], Candidate("reversed", HZ, 1.0), chance)]
    poor = BenchRatings(5.0, None, 26.0, 1.0)
    got = proposals(steps, full_scale=FULL_SCALE, ratings=poor, limits=Limits(power_min_w=1.0, power_max_w=100.0))
    assert got.lead[0].startswith("the dummy load bounds this calibration")


def test_proposal_says_what_it_would_give():
    """The sentence has the interval now and after, on the step's band, with the aim that was asked for."""
    best = advice(minimal(COUPLERS[0], (HZ,), np.random.default_rng(1))).proposals[0]
    (now,), (after,) = best.now, best.after
    said = f"at SWR 1.5, 10 W, 20 m: {now[0]:.2f}-{now[1]:.2f}; after this step {after[0]:.2f}-{after[1]:.2f}"
    assert said in best.words
    assert after[1] - after[0] < now[1] - now[0]


@pytest.mark.parametrize("detector", LAWS)
def test_every_law_gets_advice(detector):
    """With any detector law a sheet that carries its fit gets ranked steps that narrow."""
    chance = np.random.default_rng(6)
    steps = [Candidate("dark"), Candidate("load", HZ, 1.0, "25")]
    steps += [Candidate(kind, HZ, watts) for kind in ("power", "reversed") for watts in np.geomspace(0.1, 90.0, 8)]
    got = advice([measure(COUPLERS[0], step, chance) for step in steps], detector=detector)
    assert not got.fixed
    assert got.proposals[0].joint > 0.0
    assert np.isfinite([proposal.narrowing for proposal in got.proposals]).all()


def test_aim_beyond_the_detectors_is_said():
    """An aim whose reading would clip is named with its band."""
    steps = minimal(COUPLERS[0], (HZ,), np.random.default_rng(1))
    assert "5000 W at SWR 1.5 is beyond what the detectors count on 20 m" in advice(steps, aim=Aim(power_w=5000.0)).lead


def test_hundred_candidates_are_ranked_within_a_second():
    """Four bands with more than a hundred candidates: rows, plans and ranking take less than a second of processor."""
    bands_hz = (3.65e6, 7.1e6, HZ, 28.4e6)
    steps = minimal(COUPLERS[0], bands_hz, np.random.default_rng(1))
    model = BenchModel(steps, RATINGS, 50.0, DiodeLaw)
    solution = solve(model)
    found = candidates(steps, LIMITS, bands_hz=list(bands_hz))
    begun = time.process_time()
    ranked = rank(Foresight(model, solution, found, full_scale=FULL_SCALE))
    taken = time.process_time() - begun
    print(f"\n{len(ranked)} candidates on {len(bands_hz)} bands: {taken:.2f} s of processor")
    assert len(ranked) > 90
    assert taken < 1.0
