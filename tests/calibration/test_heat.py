"""Heat of the bench's parts: what they hold, what room is left, how long to wait."""

import math

import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from calibration.heat import DUMMY_S, RESISTOR_S, BenchHeat, HeatStore, taken_w

watts = st.floats(0.0, 2000.0)
seconds = st.floats(0.01, 600.0)


def bench(**ratings):
    """A bench with a 100 W dummy load and 2 W resistors, unless told otherwise."""
    return BenchHeat(**{"dummy_w": 100.0, "resistor_w": 2.0} | ratings)


def test_rated_power_for_ever_just_fills_a_part():
    """At its continuous power a part comes to hold its joules and no more, and may go on."""
    part = HeatStore(100.0, 3000.0)
    part.pass_time(100.0, 1e6)
    assert part.held == pytest.approx(3000.0)
    assert part.room_s(100.0) == math.inf


def test_short_burst_is_counted_as_power_times_time():
    """100 W for 60 s is 6 kJ (arithmetic of the trade) where nothing is lost meanwhile."""
    part = HeatStore(None, None)
    part.pass_time(100.0, 60.0)
    assert part.held == 6000.0


def test_heat_leaves_with_the_time_constant():
    """After one time constant, joules over watts, a part holds 1/e of what it held."""
    part = HeatStore(100.0, 3000.0, held=3000.0)
    assert part.tau_s == 30.0
    part.pass_time(0.0, 30.0)
    assert part.held == pytest.approx(3000.0 / math.e)


@given(held=st.floats(0.0, 3000.0), power=watts, first=seconds, second=seconds)
def test_time_passes_alike_in_one_piece_or_two(held, power, first, second):
    """How often the caller counts does not matter."""
    once, twice = HeatStore(100.0, 3000.0, held), HeatStore(100.0, 3000.0, held)
    once.pass_time(power, first + second)
    twice.pass_time(power, first)
    twice.pass_time(power, second)
    assert once.held == pytest.approx(twice.held, rel=1e-9, abs=1e-9)


@given(held=st.floats(0.0, 3000.0), power=st.floats(101.0, 2000.0))
def test_room_is_just_what_fills_a_part(held, power):
    """A power kept up for as long as there is room leaves the part exactly full."""
    part = HeatStore(100.0, 3000.0, held)
    part.pass_time(power, part.room_s(power))
    assert part.held == pytest.approx(3000.0)


@given(held=st.floats(0.0, 4000.0), power=watts, long=seconds)
@example(held=0.0, power=104.0, long=98.0)  # too much by a third of a per mille, and nothing in it yet
def test_hold_off_is_just_long_enough(held, power, long):
    """After the hold-off the step fits, and where there was one it fits with nothing to spare."""
    part = HeatStore(100.0, 3000.0, held)
    hold = part.hold_s(power, long)
    if math.isinf(hold):
        cold = HeatStore(100.0, 3000.0)
        cold.pass_time(power, long)
        assert cold.held >= 3000.0 * (1.0 - 1e-9)
        return
    part.pass_time(0.0, hold)
    begin = part.held
    part.pass_time(power, long)
    fullest = max(begin, part.held)
    assert fullest <= 3000.0 * (1.0 + 1e-9)
    assert hold == 0.0 or fullest == pytest.approx(3000.0)


def test_hold_off_of_hours_of_power_is_a_number():
    """Times far beyond the time constant neither overflow nor divide by nothing."""
    part = HeatStore(100.0, 3000.0, 2000.0)
    assert part.hold_s(90.0, 1e7) == 0.0
    assert part.hold_s(110.0, 1e7) == math.inf


def test_overfull_part_has_no_room():
    """A part keyed beyond its rating must first cool, whatever the power."""
    part = HeatStore(100.0, 3000.0, held=3500.0)
    assert part.room_s(50.0) == part.room_s(500.0) == 0.0
    assert part.hold_s(50.0, 1.0) == pytest.approx(30.0 * math.log(3500.0 / 3000.0))


@pytest.mark.parametrize(("power", "time"), [(-1.0, 1.0), (1.0, -1.0), (math.nan, 1.0)])
def test_negative_heat_is_a_callers_mistake(power, time):
    """A power or a time below nothing, or none at all, is refused."""
    with pytest.raises(ValueError, match="wanted neither below 0"):
        HeatStore(100.0, 3000.0).pass_time(power, time)


def test_dummy_stands_half_a_minute_unless_told():
    """Without dummy_j the dummy load holds 30 s of its rated power; a told value goes before."""
    assert bench().store(None).joules == DUMMY_S * 100.0
    assert bench(dummy_j=500.0).store(None).joules == 500.0
    assert bench().store("25").joules == RESISTOR_S * 2.0


def test_only_the_part_in_use_warms():
    """While one resistor is heated the dummy load and the other resistors cool."""
    heat = bench()
    heat.pass_time(10.0, power_w=100.0)
    heat.pass_time(1.0, load="25", power_w=2.0)
    dummy, first = heat.store(None).held, heat.store("25").held
    heat.pass_time(1.0, load="100", power_w=2.0)
    assert heat.store(None).held < dummy
    assert heat.store("25").held < first
    assert heat.store("100").held == pytest.approx(first)


def test_hot_dummy_is_held_off_in_words_with_seconds():
    """A verdict that holds off says for how long, for what, and why; after that long it is ready."""
    heat = bench()
    heat.pass_time(25.0, power_w=150.0)
    verdict = heat.verdict(150.0, 10.0)
    assert not verdict.ready
    assert verdict.hold_s == pytest.approx(1.67, abs=0.01)
    assert verdict.words == "hot: the dummy load holds 2544 of 3000 J; wait 2 s before 150 W for 10 s"
    heat.pass_time(verdict.hold_s)
    assert heat.verdict(150.0, 10.0).ready


@given(power=watts, long=seconds, warm=watts, dummy=st.none() | st.just(100.0))
def test_verdict_never_holds_off_silently(power, long, warm, dummy):
    """Whatever the heat, a verdict has words, and one that is not ready names its wait or says that none will do."""
    heat = bench(dummy_w=dummy)
    heat.pass_time(20.0, power_w=warm)
    verdict = heat.verdict(power, long)
    assert verdict.words
    if not verdict.ready:
        assert ("even cold" if math.isinf(verdict.hold_s) else "wait ") in verdict.words


def test_part_without_a_rating_is_counted_and_never_held_off():
    """Where no rating is told the joules are named, and so is what is missing."""
    heat = BenchHeat()
    heat.pass_time(100.0, power_w=100.0)
    verdict = heat.verdict(1000.0, 60.0)
    assert verdict.ready
    assert verdict.words == "the dummy load has taken 10000 J; its rating is not told, so mind its heat"


@pytest.mark.parametrize(
    ("load", "part"), [(None, 1.0), ("open", 0.0), ("short", 0.0), ("50", 1.0), ("25", 8 / 9), ("100", 8 / 9)]
)
def test_load_takes_what_it_does_not_reflect(load, part):
    """P (1 - rho^2): at SWR 2 eight ninths stay."""
    assert taken_w(9.0, load) == pytest.approx(9.0 * part, abs=1e-12)
