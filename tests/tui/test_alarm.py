"""Alarms: one frame alone never decides, and nothing stays raised that is no longer known."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.tui.fakes import reading
from tui.alarm import Alarm, AlarmState, KeyClock, KeyState, Limits
from tui.sample import Sample

LIMITS = Limits(swr=2.0, power_w=120.0)
OVER, UNDER = 0.4, 0.2  # rho; the limit of SWR 2 is at a third


def frame(at_s, rho=UNDER, forward_w=50.0, *flags):
    """One reading as the alarm sees it."""
    return Sample(at_s, rho, forward_w, frozenset(flags))


def over(frames, limits=LIMITS):
    """What is over the limit after these frames."""
    alarm = Alarm(limits)
    for each in frames:
        alarm.feed(each)
    return alarm.state(frames[-1], reading(0.0, half=0.0, forward=1.0), blind=False).over


def steady(*rhos, step_s=0.05, forward_w=50.0):
    """Frames one after the other."""
    return [frame(n * step_s, rho, forward_w) for n, rho in enumerate(rhos)]


def test_feed_one_frame_beyond_the_swr_limit_raises_nothing():
    """A single damaged frame is no alarm."""
    assert over(steady(UNDER, UNDER, OVER)) == ()
    assert over(steady(UNDER, OVER, UNDER, OVER, UNDER)) == ()


def test_feed_two_frames_beyond_the_swr_limit_raises():
    """The second of two neighbours decides."""
    assert over(steady(UNDER, OVER, OVER)) == ("SWR",)


def test_feed_beyond_unity_is_beyond_any_swr_limit():
    """An open line reads beyond unity, which has no SWR but is no good match."""
    assert over([frame(n * 0.05, 1.02, 50.0, "over-unity") for n in range(3)]) == ("SWR",)


def test_feed_second_frame_too_late_raises_nothing():
    """Two frames beyond the limit with more than a second between them are two single ones."""
    assert over([frame(0.0), frame(0.05, OVER), frame(1.2, OVER)]) == ()


@pytest.mark.parametrize("flag", ["below-reading", "swapped", "stale", "uncalibrated", "no-carrier"])
def test_feed_frames_that_cannot_judge_raise_no_swr_alarm(flag):
    """Flags that make the SWR meaningless keep it out of the alarm."""
    assert over([frame(n * 0.05, OVER, 50.0, flag) for n in range(5)]) == ()


def test_feed_weak_frames_are_not_judged():
    """Far below the crest, between syllables and at the edges of a carrier, SWR says nothing."""
    weak = [Sample(0.2 + n * 0.05, OVER, 9.0, frozenset(), weak=True) for n in range(5)]
    assert over(weak) == ()
    assert over([*weak, frame(0.5, OVER), frame(0.55, OVER)]) == ("SWR",)


def test_feed_two_crests_of_speech_within_a_second_raise_power():
    """Power in speech needs two frames within a second, not neighbours."""
    crests = [frame(0.0, UNDER, 130.0), frame(0.1, UNDER, 20.0), frame(0.2, UNDER, 20.0), frame(0.9, UNDER, 130.0)]
    assert over(crests) == ("power",)
    assert over([frame(0.0, UNDER, 130.0), frame(0.6, UNDER, 20.0), frame(1.1, UNDER, 130.0)]) == ()


def test_feed_unchecked_frames_must_agree():
    """Two unchecked values beyond the limit count only when they are within a fifth of each other."""
    wild = [frame(0.0, UNDER, 130.0, "unchecked"), frame(0.05, UNDER, 1300.0, "unchecked")]
    assert over(wild) == ()
    assert over([*wild, frame(0.1, UNDER, 1290.0, "unchecked")]) == ("power",)


def test_feed_within_the_limit_again_clears_after_a_second():
    """An alarm stays a second after the last frame beyond, then two frames within clear it."""
    raised = steady(OVER, OVER, UNDER, UNDER, UNDER)
    assert over(raised) == ("SWR",)
    assert over([*raised, frame(1.1), frame(1.15)]) == ()


def test_feed_new_transmission_begins_anew():
    """A carrier after more than the hang time is another transmission."""
    assert over([*steady(OVER, OVER), frame(3.0)]) == ()


def test_lapse_leaves_nothing_raised():
    """When readings stop, the last state is not kept."""
    alarm = Alarm(LIMITS)
    for each in steady(OVER, OVER):
        alarm.feed(each)
    alarm.lapse()
    assert alarm.state(None, None, blind=True) == AlarmState(blind=True)
    assert alarm.state(frame(0.2), reading(0.1), blind=False).over == ()


def test_state_only_the_far_end_beyond_may_exceed():
    """The reading's own value is within, its interval reaches beyond: may exceed, not over."""
    alarm, near = Alarm(LIMITS), frame(0.0, 0.32, 118.0)
    alarm.feed(near)
    assert alarm.state(near, reading(0.32, forward=118.0, half=0.02), blind=False) == AlarmState((), ("SWR", "power"))
    assert alarm.state(near, reading(0.32, forward=118.0, half=0.01, power_pct=1), blind=False) == AlarmState()


def test_state_below_reading_never_may_exceed_swr():
    """Below what can be read says nothing bad, however wide its bound."""
    alarm, low = Alarm(LIMITS), frame(0.0, math.nan, 50.0, "below-reading")
    alarm.feed(low)
    wide = reading(0.1, "below-reading", columns={"rho_high": 0.5})
    assert alarm.state(low, wide, blind=False).may == ()


def test_state_uncalibrated_is_blind():
    """Counts cannot be compared with watts, and the line must not say that all is well."""
    assert Alarm(LIMITS).state(frame(0.0, math.nan, math.nan, "uncalibrated"), reading(), blind=False).blind


def test_set_limits_judges_anew():
    """Other limits leave no alarm of the old ones."""
    alarm = Alarm(LIMITS)
    for each in steady(OVER, OVER):
        alarm.feed(each)
    alarm.set_limits(Limits(swr=3.0))
    assert alarm.state(frame(0.1, OVER), reading(OVER, half=0.01), blind=False) == AlarmState()


@given(st.lists(st.tuples(st.sampled_from([UNDER, OVER]), st.sampled_from(["", "swapped"])), max_size=40))
def test_feed_any_frames_never_raise_on_a_lone_one(kinds):
    """However frames are mixed, an SWR alarm needs two fit ones beyond the limit without a fit one within between."""
    frames = [frame(n * 0.05, rho, 50.0, *filter(None, [flag])) for n, (rho, flag) in enumerate(kinds)]
    alarm, run, due = Alarm(LIMITS), 0, False
    for each in frames:
        alarm.feed(each)
        if not each.flags:
            run = run + 1 if each.rho == OVER else 0
            due = due or run >= 2
        assert due or alarm.state(each, reading(0.0, half=0.0), blind=False).over == ()


def test_key_clock_counts_from_the_first_carrier():
    """The clock runs from the first frame with a carrier and bridges gaps shorter than the hang time."""
    clock = KeyClock()
    for at_s in (10.0, 11.0, 12.0):
        clock.feed(frame(at_s))
    assert clock.state(12.2, blind=False) == KeyState(True, pytest.approx(2.2))
    clock.feed(frame(12.6, math.nan, 0.0, "no-carrier"))
    assert clock.state(12.6, blind=False) == KeyState(False)
    clock.feed(frame(13.4))
    assert clock.state(13.5, blind=False) == KeyState(True, pytest.approx(3.5))


def test_key_clock_after_the_hang_time_begins_anew():
    """A carrier after more than 1.5 s is another key-down."""
    clock = KeyClock()
    clock.feed(frame(10.0))
    clock.feed(frame(20.0))
    assert clock.state(20.4, blind=False).seconds == pytest.approx(0.4)


def test_key_clock_between_syllables_stays_down():
    """The key is up half a second after the last carrier, not at every gap of speech."""
    clock = KeyClock()
    clock.feed(frame(10.0))
    clock.feed(frame(10.3, math.nan, 0.0, "no-carrier"))
    assert clock.state(10.4, blind=False).down is True
    assert clock.state(10.6, blind=False).down is False


def test_key_clock_blind_or_uncalibrated_is_unknown():
    """Without a fresh, calibrated reading nobody knows whether the key is down."""
    clock = KeyClock()
    clock.feed(frame(10.0))
    assert clock.state(11.0, blind=True).down is None
    clock.feed(frame(11.0, math.nan, math.nan, "uncalibrated"))
    assert clock.state(11.0, blind=False).down is None
