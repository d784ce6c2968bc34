"""The door to the terminal: outside text is seen, and does nothing."""

import io
import unicodedata

import pytest
from hypothesis import given
from hypothesis import strategies as st

from tui.door import say, visible

HOSTILE = {
    "\x1b[2J": r"\x1b[2J",
    "\x1b]0;title\x07": r"\x1b]0;title\x07",
    "\x9b31m": r"\x9b31m",
    "\x00\x07\x08\r\t\x7f": r"\x00\x07\x08\x0d\x09\x7f",
    "line\nbridgewright: all is well": r"line\x0abridgewright: all is well",
    "\u202egnp.exe": r"\u202egnp.exe",
    "\u2066\u2069\u200f\u061c": r"\u2066\u2069\u200f\u061c",
    "a\u200bb\ufeff\u00ad": r"a\u200bb\ufeff\xad",
    "\u2028\u2029\u0085": r"\u2028\u2029\x85",
    "\udc9b[31m": r"\udc9b[31m",
    "\U000e0041": r"\U000e0041",
    "\u3164\uffa0\u115f": r"\u3164\uffa0\u115f",
}


@pytest.mark.parametrize("text", HOSTILE)
def test_hostile_text_is_shown_escaped(text):
    """Control, C1, bidi, zero-width and tag characters, and bytes that are no text, are written as escapes."""
    assert visible(text) == HOSTILE[text]


@given(st.text())
def test_nothing_that_drives_a_terminal_passes(text):
    """What comes out holds no control, format, surrogate, private or line-parting character."""
    shown = visible(text)
    assert not {unicodedata.category(char) for char in shown} & {"Cc", "Cf", "Cs", "Co", "Cn", "Zl", "Zp"}


@given(st.text(st.characters(categories=["L", "N", "P", "S"], exclude_characters="\u115f\u1160\u3164\uffa0")))
def test_printable_text_passes_unchanged(text):
    """Letters of any script, digits and signs stay as they are."""
    assert visible(text, most=10**6) == text


@given(st.text())
def test_door_may_be_passed_twice(text):
    """What has passed once passes again unchanged."""
    assert visible(visible(text)) == visible(text)


def test_long_text_is_cut_and_says_so():
    """Of 100 kB of text the first 2000 characters are shown, and how much is left."""
    assert visible("x" * 100_000) == "x" * 2000 + "... (98000 more characters)"


def test_say_writes_lines_and_escapes_within_them():
    """Our own line ends stay, what stands between them passes the door."""
    stream = io.TextIOWrapper(io.BytesIO(), encoding="utf-8", newline="\n")
    say("one\ntwo\x1b[2J ü", stream)
    stream.flush()
    assert stream.buffer.getvalue().decode() == "one\ntwo\\x1b[2J ü\n"


@pytest.mark.parametrize("encoding", ["ascii", "latin-1", "cp437"])
def test_say_fits_the_terminals_encoding(encoding):
    """What a terminal cannot show is written as an escape and raises nothing."""
    stream = io.TextIOWrapper(io.BytesIO(), encoding=encoding, newline="\n")
    say("Ω 測", stream)
    stream.flush()
    assert "\\u6e2c" in stream.buffer.getvalue().decode(encoding)
