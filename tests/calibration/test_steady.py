"""Steadiness found by itself: a drifting carrier is never taken, a steady one soon, whatever converter and feed."""

import gzip

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from calibration.steady import Steady
from tests import shed

DARK, REFLECTED = 5.0, 10.0


def carrier(net, *, rate=100, seconds=10.0, drift=0.0, sd=0.85, seed=0, quantised=True):
    """Counts of a carrier `net` above dark that drifts by a part a second: forward, reflected, seconds."""
    chance = np.random.default_rng(seed)
    t = np.arange(int(rate * seconds)) / rate
    forward = DARK + net * (1.0 + drift * t) + chance.normal(0.0, sd, len(t)) if sd else DARK + net * (1.0 + drift * t)
    reflected = DARK + REFLECTED + (chance.normal(0.0, sd, len(t)) if sd else 0.0 * t)
    return (np.rint(forward), np.rint(reflected), t) if quantised else (forward, reflected, t)


def watch(columns, *, batch=5, steady=None, full_scale=4095, sd=0.85, **options):
    """Feed by batches until taken or at the end; the watcher, and when [s] it was done."""
    steady = steady or Steady(full_scale=full_scale, dark=(DARK, DARK), dark_sd=(sd, sd))
    forward, reflected, t = columns
    for start in range(0, len(t), batch):
        part = slice(start, start + batch)
        if steady.push(forward[part], reflected[part], t[part], **options).taking:
            return steady, float(t[part][-1])
    return steady, None


#: Converters: full scale, scatter of single readings; 12 bit, 12 bit without noise, 16 bit, 16 bit of a noisy board.
CONVERTERS = [(4095, 0.85), (4095, 0.0), (65520, 3.0), (65520, 30.0)]


# A steady carrier


@pytest.mark.parametrize(("full_scale", "sd"), CONVERTERS)
@pytest.mark.parametrize(("rate", "usual_s", "longest_s"), [(100, 2.3, 4.0), (20, 5.5, 9.0), (1000, 2.3, 4.0)])
def test_steady_carrier_is_taken_soon(full_scale, sd, rate, usual_s, longest_s):
    """At 100/s usually within 2.3 s, at 20/s within 5.5 s, and nearly always within twice that."""
    options = {"full_scale": full_scale, "sd": sd, "batch": rate // 20}
    done = [
        watch(carrier(0.5 * full_scale, rate=rate, sd=sd, seed=seed), **options)[1]
        for seed in range(10 if rate == 1000 else 40)
    ]
    times = [np.inf if one is None else one for one in done]
    assert np.median(times) <= usual_s
    assert np.mean(np.array(times) <= longest_s) >= 0.95


def test_means_and_scatter_of_a_taking_are_those_of_its_tallies():
    """The means, the sd of single readings, how many and when, are of the stretch named, with a temperature."""
    columns = carrier(1000.0)
    steady, _ = watch(columns, temperature_c=31.5)
    taking = steady.state.taking
    rows = (columns[2] >= taking.from_s) & (columns[2] <= taking.to_s)
    assert taking.samples == rows.sum() >= 100
    assert taking.forward == pytest.approx(columns[0][rows].mean())
    assert taking.forward_sd == pytest.approx(columns[0][rows].std(ddof=1))
    assert taking.reflected == pytest.approx(columns[1][rows].mean())
    assert taking.reflected_sd == pytest.approx(columns[1][rows].std(ddof=1))
    assert taking.temperature_c == 31.5


def test_counts_that_never_change_are_steady():
    """A quantised carrier without any noise is taken, with a scatter of nothing."""
    steady, done_s = watch(carrier(1000.0, sd=0.0))
    assert done_s <= 2.3
    assert (steady.state.taking.forward_sd, steady.state.taking.forward) == (0.0, 1005.0)


def test_reversed_bridge_shows_its_carrier_in_the_reflected_counts():
    """With the bridge turned round the key is seen, and the step taken, by the reflected detector."""
    forward, _, t = carrier(1000.0)
    steady, done_s = watch((np.full_like(forward, DARK + 2.0), forward, t))
    assert done_s is not None
    assert steady.state.carrier
    assert steady.state.taking.reflected == pytest.approx(1005.0, abs=0.5)


def test_dark_counts_are_taken_before_anything_is_known():
    """The first dark step of a bench needs no dark counts, and gives them with their scatter."""
    steady, done_s = watch(carrier(0.0), steady=Steady(full_scale=4095, carrier=False))
    assert done_s <= 3.0
    assert steady.state.taking.forward == pytest.approx(DARK, abs=0.3)
    assert steady.state.taking.forward_sd == pytest.approx(0.9, abs=0.15)


def test_how_the_feed_is_cut_changes_nothing():
    """One batch, batches of any size, tally by tally: the same taking."""
    columns = carrier(1000.0, seed=3)
    takings = [watch(columns, batch=batch)[0].state.taking for batch in (1, 7, 5000)]
    assert takings[0] == takings[1] == takings[2]


# A carrier that moves


@pytest.mark.parametrize(("full_scale", "sd"), CONVERTERS)
@pytest.mark.parametrize("rate", [100, 20])
@pytest.mark.parametrize("drift", [0.005, -0.005, 0.02, -0.02, 0.2])
def test_drifting_carrier_is_not_taken(full_scale, sd, rate, drift):
    """0.5 % a second and more, 300 sd above dark or higher: in ten seconds of key-down never falsely steady (of 24)."""
    net = 0.8 * full_scale / (1.0 + 10.0 * max(drift, 0.0))
    runs = [
        watch(carrier(net, rate=rate, drift=drift, sd=sd, seed=seed), batch=rate, full_scale=full_scale, sd=sd)[1]
        for seed in range(24)
    ]
    assert runs == [None] * 24


@pytest.mark.long
@pytest.mark.parametrize("rate", [100, 20])
@pytest.mark.parametrize("drift", [0.005, -0.005])
def test_drifting_carrier_is_taken_in_less_than_one_of_a_hundred(rate, drift):
    """The least drift that must be seen, at 235 sd above dark: falsely steady in under 1 % of 2000 key-downs."""
    runs = [watch(carrier(200.0, rate=rate, drift=drift, seed=seed), batch=rate)[1] for seed in range(2000)]
    assert sum(one is not None for one in runs) < 20


@settings(max_examples=25, deadline=None)
@given(st.floats(0.005, 0.5), st.sampled_from([-1, 1]), st.integers(0, 2**32 - 1), st.sampled_from([0.0, 0.85, 3.0]))
def test_any_drift_is_seen(drift, sign, seed, sd):
    """Any drift from 0.5 % a second on, up or down, until the carrier is gone: no taking."""
    seconds = min(8.0, 0.5 / drift)
    steady, done_s = watch(carrier(1500.0, drift=sign * drift, seed=seed, sd=sd, seconds=seconds), sd=sd)
    assert done_s is None
    assert steady.state.phase != "taken"


def test_drift_is_named_with_its_size():
    """What moves, which way and how fast is said in words and as a number."""
    steady, _ = watch(carrier(1000.0, drift=-0.02))
    assert steady.state.why.startswith("forward drifts -")
    assert steady.state.drift[0] == pytest.approx(-20.0, abs=1.5)


def test_carrier_that_settles_is_taken_after_it_has_settled():
    """A transmitter that droops for three seconds is taken from its steady part only."""
    forward, reflected, t = carrier(1000.0)
    droop = np.rint(100.0 * np.exp(-t / 0.5))
    steady, _ = watch((forward + droop, reflected, t))
    assert 2.0 < steady.state.taking.from_s < 5.0
    assert steady.state.taking.forward == pytest.approx(1005.0, abs=1.0)


def test_noise_beyond_the_converters_is_named():
    """A scatter of 5 % of the counts is no steady carrier."""
    steady, done_s = watch(carrier(1000.0, sd=50.0), sd=0.85)
    assert done_s is None
    assert "scatters" in steady.state.why


def test_slow_wandering_is_named():
    """A swing of some percent within a window, which is neither slope nor scatter, is seen."""
    forward, reflected, t = carrier(1000.0)
    steady, done_s = watch((forward + 8.0 * np.sin(2.0 * np.pi * 2.0 * t), reflected, t))
    assert done_s is None
    assert "wanders" in steady.state.why or "drifts" in steady.state.why


def test_step_between_two_windows_is_not_taken_across():
    """Power changed while the second window fills: the taking lies on one side of the change."""
    forward, reflected, t = carrier(1000.0)
    forward = forward + np.where(t > 1.5, 3.0, 0.0)
    steady, _ = watch((forward, reflected, t))
    assert steady.state.taking.from_s > 1.4


@pytest.mark.parametrize(("step", "taken"), [(0.0, True), (2.0, False)])
def test_window_that_the_next_does_not_confirm_is_not_taken(step, taken):
    """Two windows each steady, 0.2 % apart, which is no drift yet: the second does not confirm the first."""
    # An edge, a window of 101 tallies, another, and the successor of its last one.
    forward, reflected, t = (column[:204] for column in carrier(1000.0))
    steady, _ = watch((forward + np.where(np.arange(204) > 101, step, 0.0), reflected, t))
    assert (steady.state.taking is not None) == taken


def test_moving_reflected_counts_are_no_steady_step():
    """A load that drifts while forward stands still is not taken."""
    forward, reflected, t = carrier(1000.0)
    steady, done_s = watch((forward, reflected + 500.0 * (1.0 + 0.01 * t), t))
    assert done_s is None
    assert steady.state.why.startswith("reflected ")


@pytest.mark.parametrize("column", ["forward", "reflected"])
def test_speech_and_morse_are_never_taken(column):
    """Four minutes of keying, simulated circuit: no bench step is found in it."""
    with gzip.open(shed.FOLDER / "shed_keying.csv.gz", "rt", encoding="ascii") as file:
        names = file.readline().strip().split(",")
        rows = np.loadtxt(file, delimiter=",")
    other = rows[:, names.index("forward" if column == "reflected" else "reflected")]
    columns = rows[:, names.index(column)], other, rows[:, names.index("ms")] / 1000.0
    assert watch(columns, batch=500)[1] is None


# Edges, faults and the key


@pytest.mark.parametrize("batch", [1, 7, 1000])
def test_edges_of_a_key_down_are_left_out(batch):
    """The first and the last tally of a key-down, which hold half a carrier, are in no taking."""
    # Two windows of one second each, and an edge on either side.
    forward, reflected, t = carrier(1000.0, seconds=2.04, sd=0.0)
    forward[0], forward[-1] = 300.0, 700.0
    steady, _ = watch((forward, reflected, t), batch=batch)
    assert (steady.state.taking.from_s, steady.state.taking.to_s) == (t[1], t[-2])
    assert steady.state.taking.forward == 1005.0
    # One tally less, and the last one of the second window may be an edge.
    assert watch((forward[:-1], reflected[:-1], t[:-1]), batch=batch)[1] is None


def test_key_down_and_up_are_seen_with_hysteresis():
    """Down above 8 sd of dark, up below 4; between them the key is where it was."""
    steady = Steady(full_scale=4095, dark=(DARK, DARK), dark_sd=(1.0, 1.0))
    seen = [steady.push(DARK + away, DARK, at / 100.0).carrier for at, away in enumerate([0, 6, 9, 6, 3, 6, 0])]
    assert seen == [False, False, True, True, False, False, False]


def test_key_is_watched_after_the_taking():
    """Once taken a step stays taken, and key up is still seen."""
    steady, done_s = watch(carrier(1000.0))
    taking = steady.state.taking
    assert steady.state.carrier
    after = steady.push([DARK] * 3, [DARK] * 3, done_s + np.arange(1, 4) / 100.0)
    assert (after.phase, after.carrier, after.taking) == ("taken", False, taking)


def test_carrier_in_a_dark_step_waits_for_key_up():
    """A dark step with the key still down says what it waits for, and is taken after key up without the edge."""
    steady = Steady(full_scale=4095, dark=(DARK, DARK), dark_sd=(0.85, 0.85), carrier=False)
    down, dark = carrier(1000.0, seconds=5.0), carrier(0.0, seed=1)
    watch(down, steady=steady)
    assert (steady.state.phase, steady.state.why) == ("waiting", "waiting for the key to come up")
    watch((dark[0], dark[1] - REFLECTED, dark[2] + 5.0), steady=steady)
    assert steady.state.taking.from_s >= 5.01
    assert steady.state.taking.forward == pytest.approx(DARK, abs=0.3)


def test_key_up_between_begins_anew():
    """Two key-downs of a second and a half each are not joined to one step."""
    steady = Steady(full_scale=4095, dark=(DARK, DARK), dark_sd=(0.85, 0.85))
    first, second = carrier(1000.0, seconds=1.5), carrier(1000.0, seconds=1.5, seed=1)
    watch(first, steady=steady)
    steady.push([DARK] * 20, [DARK] * 20, 1.5 + np.arange(20) / 100.0)
    assert steady.state.phase == "waiting"
    watch((second[0], second[1], second[2] + 1.7), steady=steady)
    assert steady.state.taking is None


@pytest.mark.parametrize("jump_s", [30.0, -30.0])
def test_silence_or_a_new_start_begins_anew(jump_s):
    """After a gap, or a clock that went back, the counts before do not confirm those after."""
    forward, reflected, t = carrier(1000.0, seconds=4.0)
    steady, _ = watch((forward, reflected, np.where(t > 1.5, t + jump_s, t)))
    taking = steady.state.taking
    assert taking.from_s > 1.5 + jump_s
    assert taking.to_s - taking.from_s < 2.4


def test_detector_at_full_scale_is_never_steady():
    """Counts at the converter's end do not change and are no measurement; the wire's own word counts too."""
    forward, reflected, t = carrier(4090.0, sd=0.0)
    steady, done_s = watch((np.minimum(forward, 4095.0), reflected, t))
    assert done_s is None
    assert "full scale" in steady.state.why
    for flag, words in ((1, "full scale"), (2, "full scale"), (8, "reference")):
        steady, done_s = watch(carrier(1000.0), wire_flags=flag)
        assert done_s is None
        assert words in steady.state.why


def test_what_is_no_number_is_passed_over():
    """A count or a time that is no number is in no taking."""
    forward, reflected, t = carrier(1000.0)
    forward[50], reflected[60], t[70] = np.nan, np.inf, np.nan
    steady, _ = watch((forward, reflected, t))
    assert np.isfinite(steady.state.taking.forward)
    assert np.isfinite(steady.state.taking.reflected)


def test_carrier_step_without_dark_counts_is_a_callers_mistake():
    """A carrier cannot be told from nothing known."""
    with pytest.raises(ValueError, match="wanted dark="):
        Steady(full_scale=4095)


def test_memory_stays_bounded():
    """Ten minutes of a carrier that never settles, or comes far too fast, keeps no more than its windows."""
    steady = Steady(full_scale=4095, dark=(DARK, DARK), dark_sd=(0.85, 0.85))
    forward, reflected, t = carrier(1000.0, seconds=600.0, sd=30.0)
    watch((forward, reflected, t), steady=steady, batch=5000)
    assert steady.state.taking is None
    assert len(steady._rows) < 300
    fast = np.tile([1000.0, 1100.0], 100_000)
    steady.push(fast, fast, 600.0 + np.arange(len(fast)) * 1e-6)
    assert len(steady._rows) <= 3 * 20_000


def test_progress_rises_to_one():
    """How much of two windows is there rises from nothing to all while a carrier is steady."""
    steady = Steady(full_scale=4095, dark=(DARK, DARK), dark_sd=(0.85, 0.85))
    columns = carrier(1000.0, sd=0.0)
    seen = [steady.push(*(column[at : at + 10] for column in columns)).progress for at in range(0, 210, 10)]
    assert seen == sorted(seen)
    assert (seen[0] < 0.1, seen[-1]) == (True, 1.0)
