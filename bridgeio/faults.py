"""What pydantic found wrong in a file, in our words.

One rule: every fault says its path in the file, what was found and what is wanted, with the unit and a near miss where
there is one.
"""

from __future__ import annotations

import difflib
import re
import reprlib
from collections.abc import Callable, Mapping, Sequence
from typing import Any

__all__ = ["fault_in_words", "short"]

#: Table in the file ("" is the file itself) -> keys known there.
Known = Mapping[str, Sequence[str]]

#: What a key wants, in a reader's words, where its name does not end in its unit.
_WANTED = {
    "full_scale": "the largest count a tally can hold",
    "forward": "mean counts",
    "reflected": "mean counts",
    "volts": "volts across the dummy load",
    "load": 'ohms, like "100"',
    "device_id": 'like "1A2B3C4D"',
}
#: How the name of a key ends -> unit.
_UNITS = {
    "_w": "watts",
    "_hz": "hertz",
    "_pct": "percent",
    "_db": "decibels",
    "_ohm": "ohms",
    "_deg": "degrees",
    "_c": "degrees Celsius",
    "_sd": "counts",
    "_j": "joules",
    "_ms": "milliseconds",
    "_mv": "millivolts",
    "_nh": "nanohenries",
    "_pf": "picofarads",
    "_ev": "electronvolts",
}
_SHORT = reprlib.Repr()  # bounded in depth too: a dotted key may nest thousands of tables
_SHORT.maxstring = _SHORT.maxlong = _SHORT.maxother = 60


def short(value: object) -> str:
    """A value as a fault shows it: in quotes where it is text, and never long."""
    try:
        return _SHORT.repr(value)
    except ValueError:  # Python writes no integer of more than 4300 digits, but reads one in hexadecimal
        return "a number of thousands of digits"


def fault_in_words(error: Any, known: Known) -> str:
    """One of a ValidationError's errors as a line: path, what was found, what is wanted."""
    path, kind = _path(error["loc"]), error["type"]
    if kind == "extra_forbidden":
        return f"{path}: {_stranger(error['loc'], known)}"
    if kind == "value_error":
        return f"{path}: {error['ctx']['error']}"
    if kind == "missing":
        unit = _unit(error)
        return f"{path}: is missing{f'; wanted {unit}' if unit else ''}"
    say = _WORDS.get(kind)
    unit = _unit(error)
    wanted = f"{say(error) if say else error['msg']}{f' ({unit})' if unit else ''}"
    return f"{path}: found {short(error['input'])}; wanted {wanted}"


def _path(loc: tuple[int | str, ...]) -> str:
    """step[3].power_w: steps are counted from 1, as people do; a key that is no plain word stands in quotes."""
    text = ""
    for part in loc:
        if isinstance(part, int):
            text += f"[{part + 1}]"
        else:
            name = part if re.fullmatch(r"[A-Za-z0-9_-]{1,60}", part) else short(part)
            text += f".{name}" if text else name
    return text or "file"


def _unit(error: Any) -> str | None:
    key = str(error["loc"][-1]) if error["loc"] else ""
    return _WANTED.get(key) or next((unit for end, unit in _UNITS.items() if key.endswith(end)), None)


def _stranger(loc: tuple[int | str, ...], known: Known) -> str:
    here = known[str(loc[0]) if len(loc) > 1 else ""]
    near = difflib.get_close_matches(str(loc[-1])[:60], here, n=1, cutoff=0.5)
    return f"no such key; did you mean {near[0]}?" if near else f"no such key; known here: {', '.join(here)}"


def _limit(words: str, key: str) -> Callable[[Any], str]:
    return lambda error: f"{words} {error['ctx'][key]:.10g}"


def _choice(error: Any) -> str:
    """The words of a Literal, which pydantic lists in quotes."""
    allowed = re.findall(r"'([^']*)'", error["ctx"]["expected"])
    found = error["input"]
    near = difflib.get_close_matches(found[:60], allowed, n=1) if isinstance(found, str) else []
    return " or ".join(allowed) + (f"; did you mean {near[0]}?" if near else "")


#: pydantic's type of error -> what is wanted.
_WORDS: dict[str, Callable[[Any], str]] = {
    "float_type": lambda _: "a number",
    "int_type": lambda _: "a whole number",
    "string_type": lambda _: "text in quotes",
    "finite_number": lambda _: "a finite number",
    "literal_error": _choice,
    "string_too_short": lambda error: f"at least {error['ctx']['min_length']} character",
    "string_too_long": lambda error: f"at most {error['ctx']['max_length']} characters",
    "greater_than": _limit("more than", "gt"),
    "greater_than_equal": _limit("at least", "ge"),
    "less_than": _limit("less than", "lt"),
    "less_than_equal": _limit("at most", "le"),
    "model_type": lambda _: "a table",
    "dict_type": lambda _: "a table",
    "list_type": lambda _: "[[step]] tables",
}
