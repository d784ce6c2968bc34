"""The readout: what is shown of a reading, and the word for what is not."""

import math
from importlib import resources

import pytest
from hypothesis import given
from hypothesis import strategies as st

from calibration.flags import FLAGS
from tests.tui.fakes import below, no_carrier, reading, uncalibrated
from tui.readout import FLAG_WORDS, NOTHING, field, frequency_text, read_out
from tui.screens.tune_up import KEYS

READINGS = {
    "sound": reading(),
    "no-carrier": no_carrier(),
    "below-reading": below(),
    "below-reading without bound": below(rho_high=math.nan),
    "over-unity": reading(1.02, "over-unity"),
    "clipped": reading(0.3, "clipped", columns=dict.fromkeys(("rho", "swr", "rho_high", "swr_high"), math.nan)),
    "uncalibrated": uncalibrated(),
    "stale": reading(0.2, "stale"),
    "no upper bound": reading(0.9, half=0.2),
}


def test_read_out_sound_reading_shows_value_and_interval():
    """SWR, powers and their intervals with the digits that the intervals support."""
    shown = read_out(reading(0.1736, half=0.025))
    assert (shown.swr.text, shown.swr.interval) == ("1.42", "1.35-1.50")
    assert (shown.forward.text, shown.forward.interval) == ("49", "47-52")
    assert (shown.net.text, shown.net.interval) == ("48", "45-51")


def test_read_out_below_reading_gives_a_bound_never_1_00():
    """Below what can be read there is no SWR, only what it is at most."""
    shown = read_out(below())
    assert (shown.swr.text, shown.swr.word, shown.swr.interval) == ("", "below what can be read", "SWR at most 1.09")
    assert math.isnan(shown.rho.value)
    assert (shown.rho.low, shown.rho.high) == (0.0, 0.043)


def test_read_out_no_carrier_says_so_everywhere():
    """Without a carrier no power and no SWR is shown, and the scale is empty."""
    shown = read_out(no_carrier())
    assert {each.word for each in (shown.swr, shown.forward, shown.net, shown.reflected)} == {"no carrier"}
    assert math.isnan(shown.rho.low)


def test_read_out_over_unity_says_so_and_stays_on_the_scale():
    """Beyond unity has no SWR; its mark stands at the end of the scale."""
    shown = read_out(reading(1.02, "over-unity"))
    assert (shown.swr.text, shown.swr.word) == ("", "beyond unity")
    assert shown.rho.value == 1.0


def test_read_out_uncalibrated_shows_counts_and_no_watts():
    """Counts are shown as counts."""
    shown = read_out(uncalibrated(1234.0, 56.25))
    assert (shown.swr.word, shown.swr.interval) == ("uncalibrated", "counts 1234 / 56.2")
    assert shown.forward.text == shown.net.text == ""


def test_read_out_without_upper_bound_says_at_least():
    """Where nothing bounds the SWR from above the interval says at least."""
    shown = read_out(reading(0.9, half=0.2))
    assert shown.swr.interval == "at least 5.67"
    assert shown.rho.high == 1.0


@pytest.mark.parametrize("name", READINGS)
def test_read_out_missing_value_has_a_word(name):
    """No field is ever blank: a value or the word for why there is none."""
    shown = read_out(READINGS[name])
    for each in (shown.swr, shown.forward, shown.reflected, shown.net):
        assert bool(each.text) != bool(each.word), name


def test_read_out_none_yet_has_a_word():
    """Before the first reading every field says so."""
    assert NOTHING.swr.word == NOTHING.net.word == "no reading yet"


def test_read_out_stale_by_flag_or_by_clock():
    """Both the reading's flag and the screen's own clock make a readout stale."""
    assert read_out(reading(0.2, "stale")).stale
    assert read_out(reading(0.2), stale=True).stale
    assert not read_out(reading(0.2)).stale


@given(st.floats(1.0, 50.0), st.floats(0.001, 5.0))
def test_field_any_value_is_rounded_to_the_digit_its_interval_supports(value, half):
    """The text is the value rounded to 10^floor(log10(half the interval))."""
    unit = 10.0 ** math.floor(math.log10((value + half - (value - half)) / 2.0))
    text = field(value, value - half, value + half).text
    assert abs(float(text) - value) <= 0.5 * unit * (1 + 1e-9)
    assert abs(float(text) / unit - round(float(text) / unit)) < 1e-6


@pytest.mark.parametrize("name", [name for name in FLAGS if name != "simulated"])
def test_read_out_flag_is_said_in_words(name):
    """Every flag is told in words, beside the value or in its place."""
    made = READINGS.get(name) or reading(0.2, name)
    shown = read_out(made)
    said = (*shown.remarks, shown.swr.word, "stale" if shown.stale else "")
    assert FLAG_WORDS[name] in said


def test_flag_words_cover_the_flags():
    """A new flag needs its words here."""
    assert set(FLAG_WORDS) == set(FLAGS)


@pytest.mark.parametrize(("flag", "words"), FLAG_WORDS.items())
def test_guide_lists_every_flag_with_its_words(flag, words):
    """The guide names each flag and the words the screen says for it."""
    items = [line for line in _guide().splitlines() if line.startswith("- ") and f"`{flag}`" in line]
    assert any(f"`{words}`" in line for line in items)


@pytest.mark.parametrize("key", [key for key, *_ in KEYS])
def test_guide_lists_every_key(key):
    """The guide tells each key of the bottom line."""
    assert any(line.startswith(f"- `{key}` ") for line in _guide().splitlines())


def test_guide_carries_the_cautions():
    """A reading is no safety interlock, and the other cautions, are in the guide that `?` shows."""
    guide = _guide()
    for words in ("no safety interlock", "lowest power", "Open and short", "V = sqrt(P*S*Z0)", "choke", "lightning"):
        assert words in guide


@pytest.mark.parametrize(
    ("hz", "text"),
    [(14.1e6, "14.100 MHz"), (14_060_500, "14.0605 MHz"), (1.836e6, "1.836 MHz"), (7_000_001, "7.000001 MHz")],
)
def test_frequency_text_is_in_megahertz_to_the_kilohertz_or_finer(hz, text):
    """Three decimals, more only where the frequency has them."""
    assert frequency_text(hz) == text


def _guide():
    return resources.files("tui").joinpath("GUIDE.md").read_text(encoding="utf-8")
