"""Cautions before a bench step: which sentence comes when, and the figures in them."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from calibration.bench import BenchStep, step_power_w
from calibration.candidates import Limits
from calibration.cautions import cautions, highest_v, refusal

LIMITS = Limits(dummy_w=100.0, resistor_w=2.0, power_min_w=0.5, power_max_w=100.0, max_w=150.0)


def step(kind="power", **told):
    """A step that is planned: nothing is counted yet."""
    return BenchStep(kind, 0.0, 0.0, **{"frequency_hz": None if kind == "dark" else 14.2e6} | told)


def load(text, watts=None):
    """A planned load step."""
    return step("load", load=text, power_w=watts)


def place(said, start):
    """Where the sentence that begins so stands."""
    return next(at for at, sentence in enumerate(said) if sentence.startswith(start))


@pytest.mark.parametrize(
    ("swr", "volts"), [(1.0, 70.7), (3.0, 122.5), (10.0, 223.6)]
)  # 100 W net in 50 ohm, sqrt(P S Z0)
def test_highest_voltage_is_the_trades_figure(swr, volts):
    """100 W net at SWR 1, 3 and 10 is 70.7, 122.5 and 223.6 V rms."""
    rho = (swr - 1.0) / (swr + 1.0)
    assert highest_v(100.0 / (1.0 - rho * rho), rho) == pytest.approx(volts, abs=0.05)


def test_voltage_of_an_open_is_twice_the_matched_one():
    """Where all returns, net power is 0 and SWR infinite; the voltage is twice sqrt(P Z0), and so just short of it."""
    assert highest_v(1.0, 1.0) == pytest.approx(2.0 * 50.0**0.5)
    assert highest_v(1.0, 1.0 - 1e-9) == pytest.approx(highest_v(1.0, 1.0))


def test_power_of_a_step_may_be_told_in_volts():
    """15.8 V rms across 50 ohm are 5 W; a peak value is half of that; nothing told is nothing known."""
    assert step_power_w(step(volts=15.8114, volts_kind="rms")) == pytest.approx(5.0, rel=1e-4)
    assert step_power_w(step(volts=15.8114, volts_kind="peak")) == pytest.approx(2.5, rel=1e-4)
    assert step_power_w(step(volts=15.8114)) == pytest.approx(5.0, rel=1e-4)
    assert step_power_w(step()) is None


def test_dark_step_wants_the_transmitter_off():
    """A step without power gets no words about power."""
    said = cautions(step("dark"), LIMITS)
    assert said[0].startswith("Transmitter off, and seen to be off")
    assert not any("box" in sentence for sentence in said)


@pytest.mark.parametrize(
    ("planned", "limits", "words"),
    [
        (step(power_w=151.0), LIMITS, "151 W is above the bridge's max_w, 150 W"),
        (load("100", 5.0), LIMITS, "4.44 W into the 100 ohm load; it stands 2 W"),
        (load("open", 1.1), LIMITS, "open at 1.1 W; wanted at most 1 W"),
        (load("short", 6.0), Limits(power_min_w=5.0), "short at 6 W; wanted at most 5 W"),
        (step(power_w=400.0), Limits(dummy_w=100.0), "400 W for 10 s is 4000 J; the dummy load stands 3000 J"),
        (step(power_w=60.0), Limits(dummy_j=500.0), "60 W for 10 s is 600 J; the dummy load stands 500 J"),
    ],
)
def test_broken_rating_is_refused_before_all_else(planned, limits, words):
    """What a named rating forbids leads the list, and says what was asked and what is allowed."""
    said = cautions(planned, limits)
    assert said[0] == refusal(planned, limits)
    assert said[0].startswith("Refused: ")
    assert words in said[0]


@pytest.mark.parametrize(
    ("planned", "limits"),
    [
        (step("dark"), LIMITS),
        (step(power_w=150.0), LIMITS),
        (step(power_w=1e4), Limits()),
        (step(power_w=50.0), Limits(dummy_j=500.0)),
        (load("100", 2.25), LIMITS),
        (load("open", 1.0), LIMITS),
        (load("short", 5.0), Limits(power_min_w=5.0)),
        (load("25", 100.0), Limits()),
        (load("100"), LIMITS),
    ],
)
def test_step_within_the_named_ratings_is_not_refused(planned, limits):
    """At a rating, below it, and where none is named, nothing is refused."""
    assert refusal(planned, limits) is None
    assert not any(sentence.startswith("Refused") for sentence in cautions(planned, limits))


@pytest.mark.parametrize("text", ["open", "short", " Open", "0+50j"])
def test_open_and_short_ask_for_low_power_first(text):
    """Where nothing takes the power, low power and a brief key-down come first."""
    assert cautions(load(text, 0.5), LIMITS)[0].startswith("Open and short: at low power only, or behind a pad")


def test_voltage_at_high_swr_is_worked_out():
    """2.25 W forward into 100 ohm: 2 W net at SWR 2 give sqrt(2 * 2 * 50) = 14.1 V rms."""
    said = cautions(load("100", 2.25), LIMITS)
    assert "Voltage sqrt(P S Z0): 2 W net at SWR 2 is 14 V rms, 20 V peak." in said
    assert "High voltage: 1 W forward, all of it returned, is 14 V rms." in cautions(load("open", 1.0), LIMITS)
    assert "High SWR means high voltage: V = sqrt(P S Z0)." in cautions(load("100"), LIMITS)


def test_voltage_on_a_matched_line_is_named_where_it_is_high():
    """5 W into the dummy need no word about voltage, 100 W do."""
    assert not any("V rms" in sentence for sentence in cautions(step(power_w=5.0), LIMITS))
    assert any("71 V rms, 100 V peak" in sentence for sentence in cautions(step(power_w=100.0), LIMITS))


def test_most_forward_power_of_a_resistor_is_told():
    """A 2 W resistor of 100 ohm takes eight ninths: 2.25 W forward; without a rating a careful 0.25 W is named."""
    assert "The 100 ohm load stands 2 W, so at most 2.25 W forward." in cautions(load("100"), LIMITS)
    assert any("keep below 0.25 W" in sentence for sentence in cautions(load("100"), Limits()))


def test_heat_of_the_dummy_is_told_where_it_matters():
    """Little heat needs no word; much says watts or seconds, and that a hot dummy load drifts."""
    assert not any("Dummy" in sentence for sentence in cautions(step(power_w=5.0), LIMITS))
    assert any("80 W of the 100 W" in sentence for sentence in cautions(step(power_w=80.0), LIMITS))
    assert any("150 W for 20 s is all it stands" in sentence for sentence in cautions(step(power_w=150.0), LIMITS))
    assert any("rating is not told" in sentence for sentence in cautions(step(power_w=5.0), Limits()))


powered = st.one_of(
    st.builds(step, kind=st.sampled_from(["power", "reversed"]), power_w=st.none() | st.floats(1e-3, 5e3)),
    st.builds(load, st.sampled_from(["25", "100", "24.87+3.5j", "open", "short"]), st.none() | st.floats(1e-3, 5e3)),
)
limits = st.builds(
    Limits, *[st.none() | st.floats(0.1, 2e3)] * 6
)  # dummy_w, dummy_j, resistor_w, power_min_w, power_max_w, max_w


@given(powered, limits)
def test_every_step_with_power_carries_the_lasting_cautions(planned, limits):
    """Key up before a change, box closed, burns, earths, lightning, rules, no interlock: each once, nothing empty."""
    said = cautions(planned, limits)
    whole = " ".join(said)
    for words in ("seen to be up", "lowest power that reads", "Close the box", "burn", "Bond the earths", "lightning"):
        assert whole.count(words) == 1, words
    for words in ("Local rules", "licensed practice", "computes no exposure limits", "no safety interlock", "max_w"):
        assert words in whole
    assert len(set(said)) == len(said)
    assert place(said, "Key up") < place(said, "Close") < place(said, "Use the lowest") < place(said, "Bond")


@given(powered, limits)
def test_sentences_fit_a_terminal(planned, limits):
    """Every sentence ends as one and fits 76 columns; a refusal with odd figures may take a few more."""
    for sentence in cautions(planned, limits):
        assert sentence.endswith(".")
        assert len(sentence) <= (100 if sentence.startswith("Refused") else 76), sentence
