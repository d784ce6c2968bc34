"""The text forms of the wire: twins of binary frames, plain lines of two decimals, lines by a user's pattern.

One rule: a line is one of the forms from end to end or it is none; nothing is guessed from a part of it.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from itertools import pairwise
from typing import TypeAlias

from bridgeio.errors import BridgeIOError
from bridgeio.framing import MAX_PAYLOAD, MIN_PAYLOAD, crc16

__all__ = ["PatternError", "Plain", "PlainReader", "plain_reader", "read_decimals", "read_twin"]

#: A longer line is not tried with a user's pattern, whose cost may grow with a power of the length [bytes].
PATTERN_LINE = 100

#: Forward and reflected [counts], device time [ms] or None.
Plain: TypeAlias = tuple[float, float, int | None]
PlainReader: TypeAlias = Callable[[bytes], Plain | None]

_TWIN = re.compile(rb"\$((?:[0-9A-Fa-f]{2}){%d,%d})([0-9A-Fa-f]{4})" % (MIN_PAYLOAD, MAX_PAYLOAD))
_NUMBER = r"[0-9]{1,10}(?:\.[0-9]{1,10})?"
_DECIMAL = re.compile(_NUMBER)
_DECIMALS = re.compile(rf"[ \t]*({_NUMBER})(?:[ \t]*,[ \t]*|[ \t]+)({_NUMBER})[ \t]*".encode())
#: What matters for the cost of a pattern: escapes and classes as one, groups, repeats without end.
_PARTS = re.compile(r"\\.|\[\^?\]?(?:\\.|[^\]\\])*\]|\((?:\?P<\w+>|\?:)?|\)|[*+]|\{\d*,?\d*\}|\||.", re.DOTALL)


class PatternError(BridgeIOError, ValueError):
    """A pattern for plain lines cannot be used. It is a mistake in what was typed: usage."""


def read_twin(line: bytes) -> bytes | bool:
    """The payload of a text twin (without its line end), numbers big-endian.

    True where the line has the form of a twin and its check is wrong, False where it has not the form.
    """
    match = _TWIN.fullmatch(line)
    if match is None:
        return False
    digits, check = match.groups()
    return bytes.fromhex(digits.decode("ascii")) if crc16(digits) == int(check, 16) else True


def read_decimals(line: bytes) -> Plain | None:
    """Forward and reflected of a plain line of two decimals, or None."""
    match = _DECIMALS.fullmatch(line)
    return (float(match[1]), float(match[2]), None) if match else None


def plain_reader(pattern: str | None) -> PlainReader:
    """What reads a plain line: two decimals, or the user's pattern, looked for anywhere in the line.

    Raises PatternError for a pattern that is no regular expression, lacks a group, or could take for ever.
    """
    if pattern is None:
        return read_decimals
    try:
        compiled = re.compile(pattern)
    except (re.error, OverflowError, RecursionError) as error:
        raise PatternError(f"pattern {pattern!r} is no regular expression: {error}") from error
    missing = {"forward", "reflected"} - set(compiled.groupindex)
    if missing:
        raise PatternError(
            f"pattern {pattern!r} lacks the group {' and '.join(sorted(missing))}: "
            "write (?P<forward>...) and (?P<reflected>...), and (?P<ms>...) if there is a time"
        )
    if _may_explode(pattern):
        raise PatternError(
            f"pattern {pattern!r} could take for ever on some lines: "
            "no repeated group may hold a repeat or a choice, and a dot may be repeated three times at most"
        )
    return lambda line: _read_pattern(compiled, line)


def _read_pattern(pattern: re.Pattern[str], line: bytes) -> Plain | None:
    match = pattern.search(line.decode("utf-8", "replace")) if len(line) <= PATTERN_LINE else None
    if match is None:
        return None
    found = match.groupdict()
    texts = [found["forward"], found["reflected"]] + ([found["ms"]] if found.get("ms") else [])
    if not all(text and _DECIMAL.fullmatch(text) for text in texts):
        return None
    forward, reflected, *ms = map(float, texts)
    return forward, reflected, int(ms[0]) & 0xFFFF_FFFF if ms else None


def _may_explode(pattern: str) -> bool:
    """True where a line of 100 characters could take seconds.

    That is a repeated group which holds a repeat or a choice, as (a+)+ doubles its time with every character,
    and more than three repeated dots, each of which multiplies the time by the length.
    """
    inside, dots = [False], 0
    parts = [*_PARTS.findall(pattern), ""]
    for part, after in pairwise(parts):
        endless = after in ("*", "+") or (len(after) > 1 and after.startswith("{"))
        dots += part == "." and endless
        if part.startswith("("):
            inside.append(False)
        elif part == ")" and len(inside) > 1:
            risky = inside.pop()
            if risky and endless:
                return True
            inside[-1] |= risky
        elif part in ("*", "+", "?", "|") or ("," in part and part.startswith("{")):
            inside[-1] = True
    return dots > 3
