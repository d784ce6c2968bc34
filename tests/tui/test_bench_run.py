"""The run of bench steps as a state machine: what is taken, what is not, and what is said."""

import numpy as np
import pytest

from calibration.bench import BenchStep
from calibration.candidates import Candidate, Limits
from tui.bench.ground import Ground
from tui.bench.meter_reading import MeterReading, reading_of
from tui.bench.run import BenchRun

MAIN_HZ = 14.1e6
DARK = BenchStep("dark", 100.0, 50.0, forward_sd=3.0, reflected_sd=3.0, samples=200)
POWER = Candidate("power", MAIN_HZ, 5.0)
LOAD = Candidate("load", MAIN_HZ, 5.0, "100")
KEY_UP, KEY_DOWN = (100.0, 50.0), (20000.0, 400.0)


class Bench:
    """A run with a bridge of a hundred tallies a second before it."""

    def __init__(self, limits=None, dark=True):
        ground = Ground(65520.0, limits=limits or Limits())
        self.run = BenchRun(ground.with_dark_of((DARK,)) if dark else ground)
        self.now_s, self.chance = 0.0, np.random.default_rng(1)

    def counts(self, means, seconds, drift=0.0, flags=0):
        """Counts of both channels for so long, in pieces of a tenth of a second; forward drifts by so many a second."""
        for _ in range(round(seconds * 10)):
            t = self.now_s + np.arange(1, 11) / 100.0
            forward = means[0] + drift * t + self.chance.normal(0.0, 3.0, 10)
            reflected = means[1] + self.chance.normal(0.0, 3.0, 10)
            self.now_s = float(t[-1])
            self.run.pass_time(self.now_s)
            self.run.push(forward, reflected, t, wire_flags=flags, temperature_c=31.0)
        return self

    def keyed(self, plan=POWER, seconds=3.0):
        """A step said ready and keyed."""
        self.counts(KEY_UP, 0.3)
        self.run.choose(plan)
        self.run.ready()
        return self.counts(KEY_UP, 0.2).counts(KEY_DOWN, seconds)


def test_power_step_is_due_when_counts_and_reading_are_there():
    """Two windows agree, then the reading: due with both; written, key up, and the next may be chosen."""
    bench = Bench().keyed()
    run = bench.run
    assert run.steadiness.phase == "taken"
    assert run.wants_reading
    assert run.due is None
    run.answer("5.03")
    step = run.due
    assert (step.kind, step.power_w, step.frequency_hz, step.temperature_c) == ("power", 5.03, MAIN_HZ, 31.0)
    assert step.forward == pytest.approx(KEY_DOWN[0], abs=1.0)
    assert step.samples > 150
    run.written(2)
    assert (run.phase, run.news) == ("lift", "step 2 is in the file")
    with pytest.raises(ValueError, match="first finish this step"):
        run.choose(LOAD)
    bench.counts(KEY_UP, 0.3)
    assert (run.phase, run.plan) == ("choose", None)


def test_reading_may_be_typed_while_counts_settle():
    """Typed before the counts are steady it is kept, and the step is due with the second window."""
    bench = Bench().keyed(seconds=0.5)
    bench.run.answer("5.1")
    assert bench.run.due is None
    assert not bench.run.wants_reading
    assert bench.counts(KEY_DOWN, 2.5).run.due.power_w == 5.1


def test_load_step_needs_no_reading():
    """A known load is due as soon as it is steady, with its load and without a power."""
    step = Bench().keyed(LOAD).run.due
    assert (step.kind, step.load, step.power_w) == ("load", "100", None)


def test_dark_step_needs_no_key_and_comes_first():
    """Without dark counts only a dark step may be chosen; it is due without a key, and then powers may be."""
    bench = Bench(dark=False)
    with pytest.raises(ValueError, match="dark counts come first"):
        bench.run.choose(POWER)
    bench.run.choose(Candidate("dark"))
    bench.run.ready()
    step = bench.counts(KEY_UP, 3.0).run.due
    assert step.kind == "dark"
    assert bench.run.carrier is None
    bench.run.written(1)
    bench.run.stand_on(bench.run.ground.with_dark_of((step,)))
    bench.run.choose(POWER)
    assert bench.run.phase == "heed"


def test_unsteady_carrier_is_not_taken():
    """A carrier that drifts by a percent a second is never taken, and the drift is said."""
    bench = Bench().keyed(seconds=0.1).counts(KEY_DOWN, 8.0, drift=200.0)
    assert bench.run.steadiness.phase == "moving"
    assert "drift" in bench.run.steadiness.why
    bench.run.answer("5")
    assert bench.run.due is None


def test_key_up_before_steady_begins_again():
    """The key comes up too soon: it is said, a reading typed meanwhile is forgotten, and the next key-down counts."""
    bench = Bench().keyed(seconds=0.6)
    bench.run.answer("5")
    bench.counts(KEY_UP, 0.3)
    assert "key came up before" in bench.run.news
    assert bench.run.reading is None
    bench.counts(KEY_DOWN, 3.0).run.answer("5.2")
    assert bench.run.due.power_w == 5.2


def test_pulled_plug_takes_nothing():
    """The link is lost while a step is being taken, even when only the reading lacks: it is not taken, in words."""
    for seconds in (0.5, 3.0):
        bench = Bench().keyed(seconds=seconds)
        bench.run.lose("the port is gone")
        assert bench.run.news == "the port is gone: this step was not taken; begin it again"
        assert (bench.run.due, bench.run.phase) == (None, "heed")
        bench.counts(KEY_DOWN, 0.2)
        with pytest.raises(ValueError, match="the key is down"):
            bench.run.ready()


@pytest.mark.parametrize("text", ["", "five", "-3", "0", "nan", "5 kV", "inf"])
def test_wrong_answer_is_refused_and_asked_again(text):
    """What is no reading is said so; nothing is due, and the next answer counts."""
    run = Bench().keyed().run
    with pytest.raises(ValueError, match=r"is no reading; wanted like 5.03"):
        run.answer(text)
    assert run.wants_reading
    run.answer("4.97")
    assert run.due.power_w == 4.97


def test_doubtful_answer_is_asked_once_more():
    """Ten times the proposed power is doubted once, and kept when it is typed again."""
    run = Bench().keyed().run
    with pytest.raises(ValueError, match="50 W where 5 W was meant"):
        run.answer("50")
    assert run.due is None
    run.answer("50")
    assert run.due.power_w == 50.0


def test_volts_are_written_as_read():
    """Without a wattmeter: volts across the dummy, rms or peak, by the unit set or typed."""
    run = Bench().keyed().run
    run.unit = "V peak"
    run.answer("22.4")
    assert (run.due.volts, run.due.volts_kind, run.due.power_w) == (22.4, "peak", None)
    assert reading_of("15,8 V rms", "W") == MeterReading(15.8, "V rms")
    assert MeterReading(15.8, "V rms").power_w(50.0) == pytest.approx(15.8**2 / 50.0)


def test_hot_dummy_is_held_off_with_seconds():
    """A dummy of 5 W and 210 J that took 20 W for 6 s is not ready for 20 W again; it is when it has cooled."""
    strong = Candidate("power", MAIN_HZ, 20.0)
    bench = Bench(Limits(dummy_w=5.0, dummy_j=210.0)).keyed(strong, 6.0)
    bench.run.answer("20")
    bench.run.written(2)
    bench.counts(KEY_UP, 0.3)
    bench.run.choose(strong)
    with pytest.raises(ValueError, match=r"hot: the dummy load holds \d+ of 210 J; wait \d+ s"):
        bench.run.ready()
    bench.counts(KEY_UP, 60.0)
    assert bench.run.ready() == strong


def test_full_dummy_wants_the_key_up():
    """While the key is down the joules are counted: when the dummy is full, that is known at once."""
    bench = Bench(Limits(dummy_w=1.0, dummy_j=60.0)).keyed(POWER, 5.0)
    assert not bench.run.must_lift
    assert bench.counts(KEY_DOWN, 20.0).run.must_lift


def test_refused_step_is_not_begun():
    """More than a resistor stands, or than the bridge, is refused in words and nothing is in hand."""
    bench = Bench(Limits(resistor_w=0.25, max_w=10.0)).counts(KEY_UP, 0.2)
    for plan, words in ((LOAD, "it stands 0.25 W"), (Candidate("power", MAIN_HZ, 50.0), "above the bridge's max_w")):
        with pytest.raises(ValueError, match=words):
            bench.run.choose(plan)
    assert bench.run.plan is None


def test_ready_waits_for_the_key_to_be_up():
    """With the key down nothing is to be connected: ready is refused until it has been seen up."""
    bench = Bench().counts(KEY_DOWN, 0.3)
    bench.run.choose(LOAD)
    with pytest.raises(ValueError, match="the key is down: key up"):
        bench.run.ready()
    assert bench.counts(KEY_UP, 0.2).run.ready() == LOAD


def test_left_step_leaves_nothing():
    """Escape in the middle: nothing due, and with the key still down key up is wanted first."""
    bench = Bench().keyed()
    bench.run.leave()
    assert (bench.run.phase, bench.run.due, bench.run.news) == ("lift", None, "left: nothing was written")
    assert bench.counts(KEY_UP, 0.2).run.phase == "choose"


def test_undone_dark_step_shuts_powers_out_again():
    """When the dark step is taken back, powers wait for the next one."""
    bench = Bench()
    bench.run.stand_on(bench.run.ground.with_dark_of(()))
    assert "dark counts come first" in bench.run.why_not(POWER)


def test_step_on_another_band_than_the_bridge_tells_is_not_taken():
    """The bridge says 40 m while the step is for 20 m: not taken, in words; on its own band its frequency is kept."""
    bench = Bench().keyed(LOAD, 0.5)
    bench.run.hear_frequency(7.1e6, bench.now_s)
    bench.counts(KEY_DOWN, 2.5)
    assert bench.run.due is None
    assert "the bridge says 40 m, the step is for 20 m" in bench.run.news
    bench = Bench().keyed(LOAD, 0.5)
    bench.run.hear_frequency(14.2e6, bench.now_s)
    assert bench.counts(KEY_DOWN, 2.5).run.due.frequency_hz == 14.2e6


def test_strange_board_gets_no_step():
    """Another board than the sheet's: no step may be chosen, for its reason."""
    bench = Bench()
    bench.run.strange = "another board"
    with pytest.raises(ValueError, match="another board"):
        bench.run.choose(POWER)


def test_clipped_counts_are_not_taken():
    """A detector at its end is no step."""
    bench = Bench().keyed(seconds=0.1).counts(KEY_DOWN, 3.0, flags=1)
    assert bench.run.steadiness.phase == "moving"
