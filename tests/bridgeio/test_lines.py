"""The text forms, line by line."""

from __future__ import annotations

import time

import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from bridgeio.lines import PATTERN_LINE, PatternError, plain_reader, read_decimals, read_twin

PATTERN = r"F=(?P<forward>[\d.]+) R=(?P<reflected>[\d.]+)(?: T=(?P<ms>\d+))?"


@pytest.mark.parametrize(
    ("line", "forward", "reflected"),
    [
        (b"2714 12", 2714, 12),
        (b"2714,12", 2714, 12),
        (b"2714\t12", 2714, 12),
        (b"2714.25, 11.9", 2714.25, 11.9),
        (b"  0 \t 0.0  ", 0, 0),
        (b"1 ,\t2", 1, 2),
    ],
)
def test_decimals_of_a_plain_line(line: bytes, forward: float, reflected: float) -> None:
    """Space, comma and tab part the two numbers, a fraction is allowed."""
    assert read_decimals(line) == (forward, reflected, None)


@pytest.mark.parametrize(
    "line",
    [
        b"",
        b"2714",
        b"2714 12 5",
        b"-1 5",
        b"1e3 5",
        b"nan 1",
        b"1. 2",
        b".5 2",
        b"1,,2",
        b"1;2",
        b"12345678901 1",
        b"1 2\x00",
        "١ ٢".encode(),
        b"F 1 2",
    ],
)
def test_decimals_refuse_what_is_not_two_numbers(line: bytes) -> None:
    """Anything else on the line makes it no plain line."""
    assert read_decimals(line) is None


@settings(deadline=None)
@given(st.binary(max_size=60))
@example(b"1\n2")
def test_readers_never_raise_on_any_line(line: bytes) -> None:
    """Whatever the bytes, each reader answers."""
    reader = plain_reader(PATTERN)
    assert read_twin(line) in (True, False)
    assert read_decimals(line) is None or len(line) >= 3
    assert reader(line) is None or b"F=" in line


def test_twin_with_a_wrong_check_is_told_from_no_twin() -> None:
    """True says the form was right and the check was not, False that it is no twin at all."""
    assert read_twin(b"$1107000003E80A9A000C000D49") == bytes.fromhex("1107000003E80A9A000C00")
    assert read_twin(b"$1107000003E80A9A000C000D48") is True
    assert read_twin(b"$1107000003E80A9A000C00D49") is False
    assert read_twin(b"$" + b"00" * 251 + b"0000") is False


def test_pattern_with_time_gives_device_time() -> None:
    """The groups forward, reflected and ms are read where they stand in the line."""
    read = plain_reader(PATTERN)
    assert read(b"ok F=10.5 R=2 T=4294967297!") == (10.5, 2.0, 1)
    assert read(b"F=10 R=2") == (10.0, 2.0, None)
    assert read(b"F=1.2.3 R=2") is None
    assert read(b"10 2") is None


def test_pattern_is_not_tried_on_a_long_line() -> None:
    """A line longer than a line of numbers can be is left alone."""
    read = plain_reader(PATTERN)
    assert read(b"F=1 R=2".ljust(PATTERN_LINE)) is not None
    assert read(b"F=1 R=2".ljust(PATTERN_LINE + 1)) is None


@pytest.mark.parametrize(
    ("pattern", "words"),
    [
        ("(", "no regular expression"),
        (r"(?P<forward>\d+)", "lacks the group reflected"),
        (r"\d+", "lacks the group forward and reflected"),
        (r"(?P<forward>(\d+)+) (?P<reflected>\d)", "could take for ever"),
        (r"(?P<forward>(1|11)*)(?P<reflected>\d)", "could take for ever"),
        (r"(?P<forward>(?:\d?){30}) (?P<reflected>\d)", "could take for ever"),
        (r"((?:a+)b)*(?P<forward>\d)(?P<reflected>\d)", "could take for ever"),
        (r"(?:\d{1,3})+ (?P<forward>\d)(?P<reflected>\d)", "could take for ever"),
        (r".*.*(?P<forward>.*) (?P<reflected>.*)", "could take for ever"),
    ],
)
def test_pattern_that_cannot_be_used_is_refused(pattern: str, words: str) -> None:
    """A mistake in the pattern is told in words when it is given, not on the first line."""
    with pytest.raises(PatternError, match=words):
        plain_reader(pattern)


@pytest.mark.parametrize(
    "pattern",
    [
        r"(?P<forward>\d+(?:\.\d+)?)\s*/\s*(?P<reflected>\d+(?:\.\d+)?)",
        r"^[A-Z(+*]*: (?P<forward>[^,]+),(?P<reflected>[^,]+)$",
        r"(?:\w{3}:)+(?P<forward>\d{1,5}) \((?P<reflected>\d{1,5})\)",
        r"fwd.*?(?P<forward>\d+).*?ref.*?(?P<reflected>\d+)",
    ],
)
def test_pattern_of_an_ordinary_sort_is_taken_and_quick(pattern: str) -> None:
    """Usual patterns are accepted and take well under a tenth of a second on the worst lines."""
    read = plain_reader(pattern)
    started = time.process_time()
    for unit in (b"1", b" ", b"fwd1", b"a:", b"1 ", b"fwdref"):
        read((unit * PATTERN_LINE)[:PATTERN_LINE])
    assert time.process_time() - started < 0.6
