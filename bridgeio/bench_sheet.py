"""A bench sheet that grows while the bench goes on: begun from answers, a step appended at once, the last taken back.

One rule: what the user wrote stays as it is, byte for byte. The file is read anew before every change, the changed text
is proved to hold the same and the one step more or less, and only then the file is replaced, whole.
"""

from __future__ import annotations

import tomllib
from collections.abc import Iterator
from dataclasses import dataclass, field, fields, replace
from pathlib import Path
from typing import Any

from calibration.bench import BenchRatings, BenchStep
from calibration.candidates import Limits

from .bridge_file import BridgeFile, parse_bridge_file, sheet_text
from .errors import FileError
from .fit_table import toml_text, write_whole
from .frames import Nameplate

__all__ = ["BenchSheet", "SheetHead", "head_text", "step_text"]

_BOM = "\ufeff"
_DEFAULTS = {one.name: one.default for one in fields(BenchStep)}
#: Written even where they equal the default: a step without them would read as one of a single reading.
_ALWAYS = frozenset({"forward_sd", "reflected_sd", "samples"})
#: In the order of the file; what is not among them stands before.
_COUNTS = ("forward", "forward_sd", "reflected", "reflected_sd", "samples", "temperature_c")
#: Decimals of means and scatters: a mean of 200 sixteen-bit readings has no more.
_DECIMALS = 3
#: Optional keys of [bridge] and [bench] and the comment beside each.
_REMARKS = {
    "diode": "how it behaves in a warm box",
    "max_w": "what the coupler and its diodes stand [W]",
    "hold_ms": "detector hold time constant",
    "reference_mv": "converter reference, compared with the nameplate",
    "device_id": "the board this sheet is of",
    "match_return_loss_db": "the bridge's own match",
    "reference_pct": "accuracy of the wattmeter, 95 %, of reading",
    "reference_full_scale_w": "that percentage is of this [W]",
    "dummy_return_loss_db": "the dummy load's worst case",
    "resistor_pct": "tolerance of the known loads",
    "dummy_w": "what the dummy load stands for ever [W]",
    "dummy_j": "and for a short time [J]",
    "resistor_w": "what a known load stands [W]",
    "power_min_w": "least power of the transmitter [W]",
    "power_max_w": "its most [W]",
}


@dataclass(frozen=True, slots=True)
class SheetHead:
    """What a new sheet says of the bridge and the bench: the answers of the user and the nameplate's.

    `limits` holds max_w of [bridge] and the ratings of [bench]; None is not written.
    """

    name: str
    full_scale: int
    z0_ohm: float = 50.0
    detector: str = "diode"
    diode: str | None = None
    hold_ms: float | None = None
    reference_mv: int | None = None
    device_id: int | None = None
    match_return_loss_db: float | None = None
    ratings: BenchRatings = field(default_factory=BenchRatings)
    limits: Limits = field(default_factory=Limits)

    def of_board(self, nameplate: Nameplate) -> SheetHead:
        """The same with what the board says of itself; 0 there is not known."""
        return replace(
            self,
            full_scale=nameplate.full_scale,
            reference_mv=nameplate.reference_mv or None,
            device_id=nameplate.device_id or None,
        )


class BenchSheet:
    """The bench sheet or bridge file at a path, while steps are taken. Not for several threads at once.

    `file`: what it said when last read, less its [fit], which may be behind the steps and need not be right.
    """

    def __init__(self, path: str | Path) -> None:
        """Go on with the file at `path`. FileError where it cannot be read or is wrong."""
        self.path = Path(path)
        self._taken: list[tuple[BenchStep, str]] = []
        self.file = self._read()[1]

    @classmethod
    def create(cls, path: str | Path, head: SheetHead) -> BenchSheet:
        """Begin a sheet at `path`. FileError where something is there already, or an answer is none."""
        if Path(path).exists() or Path(path).is_symlink():
            raise FileError(f"{path}: exists already; wanted a new name, or go on with that sheet")
        text = head_text(head)
        parse_bridge_file(_writable(text, path), str(path))
        write_whole(path, text)
        return cls(path)

    @property
    def taken(self) -> tuple[BenchStep, ...]:
        """The steps of this sitting that could be taken back, oldest first, as written."""
        return tuple(step for step, _ in self._taken)

    @property
    def limits(self) -> Limits:
        """The ratings that the file names."""
        return self.file.limits

    @property
    def fit_is_behind(self) -> bool:
        """Whether the file's [fit] was made from other steps or references than are there; False where none tells."""
        fit = tomllib.loads(sheet_text(self.path).removeprefix(_BOM)).get("fit")
        told = fit.get("steps") if isinstance(fit, dict) else None
        return told not in (None, self.file.digest)

    def append(self, step: BenchStep) -> BridgeFile:
        """Write `step` (rounded as `step_text` does) as the file's last; return the file as it then is, less [fit].

        It stands before [fit], where that comes last. FileError, and the file as it was, where the file is no longer
        right, the step is not, or nothing can be written.
        """
        text, _ = self._read()
        before = tomllib.loads(text.removeprefix(_BOM))
        block = _with_ends("\n[[step]]\n" + step_text(step), text)
        wanted = before | {"step": [*before.get("step", []), _step_table(step)]}
        for changed, added in _places(text, block):
            if _same(_or_none(changed), wanted):
                self._write(changed)
                self._taken.append((self.file.steps[-1], added))
                return self.file
        raise FileError(
            f"{self.path}: not written: the sheet holds its steps in a form to which none can be added; "
            "wanted every step as a [[step]] table"
        )

    def undo(self) -> BenchStep:
        """Take the last step of this sitting out again; return it. The rest stays as it is now.

        FileError, and the file as it was, where nothing was taken, or the step is no longer there as written.
        """
        if not self._taken:
            raise FileError(f"{self.path}: no step was taken in this sitting; steps from before are removed by hand")
        step, added = self._taken[-1]
        text, _ = self._read()
        head, found, tail = text.rpartition(added)
        changed = head + tail
        if not found or not _one_less(text, changed):
            raise FileError(
                f"{self.path}: not changed: the last step is no longer there as it was written; remove it by hand"
            )
        self._write(changed)
        self._taken.pop()
        return step

    def _read(self) -> tuple[str, BridgeFile]:
        """The text as it is now, a byte order mark included, and what it says, but for [fit]."""
        text = sheet_text(self.path)
        with open(self.path, "rb") as file:
            marked = file.read(3) == _BOM.encode()
        return _BOM * marked + text, parse_bridge_file(text, str(self.path), steps_only=True)

    def _write(self, text: str) -> None:
        file = parse_bridge_file(_writable(text, self.path).removeprefix(_BOM), str(self.path), steps_only=True)
        write_whole(self.path.resolve(), text)
        self.file = file


def head_text(head: SheetHead) -> str:
    """TOML text of a new sheet without steps, with its comments."""
    id_text = None if head.device_id is None else f"{head.device_id:08X}"
    bridge = {
        "name": head.name,
        "full_scale": head.full_scale,
        "z0_ohm": head.z0_ohm,
        "detector": head.detector,
        "diode": head.diode,
        "max_w": head.limits.max_w,
        "hold_ms": head.hold_ms,
        "reference_mv": head.reference_mv,
        "device_id": id_text,
        "match_return_loss_db": head.match_return_loss_db,
    }
    ratings = {one.name: getattr(head.ratings, one.name) for one in fields(head.ratings)}
    limits = {one.name: getattr(head.limits, one.name) for one in fields(Limits) if one.name != "max_w"}
    lines = ["# Bench sheet: one [[step]] a measurement; powers in watts, frequencies in hertz, counts as means."]
    lines += ["# It may be edited by hand, also while the bench goes on.", "schema = 1", ""]
    lines += ["[bridge]", *_lines(bridge), "", "[bench]", *_lines(ratings | limits)]
    return "\n".join(lines) + "\n"


def step_text(step: BenchStep) -> str:
    """The lines of a step: what was told, counts to 3 decimals, frequency in whole hertz."""
    return "".join(f"{key} = {_value(value)}\n" for key, value in _step_table(step).items())


def _step_table(step: BenchStep) -> dict[str, Any]:
    """What a step is in the file."""
    told = {one.name: getattr(step, one.name) for one in fields(BenchStep)}
    for key in ("forward", "forward_sd", "reflected", "reflected_sd"):
        told[key] = round(float(told[key]), _DECIMALS)
    if step.frequency_hz is not None:
        told["frequency_hz"] = round(step.frequency_hz)
    order = [*(key for key in told if key not in _COUNTS), *_COUNTS]
    kept = [key for key in order if key in _ALWAYS or told[key] != _DEFAULTS.get(key, object())]
    # numpy's numbers are floats too, and are told as plain ones.
    return {key: float(told[key]) if isinstance(told[key], float) else told[key] for key in kept}


def _lines(table: dict[str, Any]) -> Iterator[str]:
    for key, value in table.items():
        if value is not None:
            remark = _REMARKS.get(key)
            yield f"{key} = {_value(value)}" + (f"    # {remark}" if remark else "")


def _value(value: object) -> str:
    if isinstance(value, str):
        return toml_text(value)
    if isinstance(value, int):
        return f"{value:_}" if abs(value) >= 1_000_000 else str(value)
    return repr(float(value)) if isinstance(value, float) else str(value)


def _with_ends(block: str, text: str) -> str:
    """The block with the line ends of the text."""
    return block.replace("\n", "\r\n") if "\r\n" in text else block


def _places(text: str, block: str) -> Iterator[tuple[str, str]]:
    """Where a block may go: (text with it, what was added), the place where people look for it first."""
    lines = text.splitlines(keepends=True)
    at = next((place for place, line in enumerate(lines) if line.lstrip(" \t").startswith("[fit")), None)
    if at is not None:
        # The comments above [fit] belong to it, with the empty line before them.
        while at and lines[at - 1].lstrip().startswith("#"):
            at -= 1
        at -= bool(at and not lines[at - 1].strip())
        yield "".join([*lines[:at], block, *lines[at:]]), block
    missing = "" if not text or text.endswith("\n") else _with_ends("\n", text)
    yield text + missing + block, missing + block


def _or_none(text: str) -> dict[str, Any] | None:
    try:
        return tomllib.loads(text.removeprefix(_BOM))
    except tomllib.TOMLDecodeError:
        return None


def _same(found: dict[str, Any] | None, wanted: dict[str, Any]) -> bool:
    """Whether both say the same. A fit may hold what is no number, which never equals itself."""
    if found is None or repr(found.get("fit")) != repr(wanted.get("fit")):
        return False
    return {**found, "fit": None} == {**wanted, "fit": None}


def _one_less(text: str, changed: str) -> bool:
    """Whether `changed` says what `text` does but for one step."""
    before, after = _or_none(text), _or_none(changed)
    if before is None or after is None:
        return False
    steps, left = before.pop("step", []), after.pop("step", [])
    at = next((place for place, (one, other) in enumerate(zip(steps, left, strict=False)) if one != other), len(left))
    return [*steps[:at], *steps[at + 1 :]] == left and len(steps) == len(left) + 1 and _same(after, before)


def _writable(text: str, path: str | Path) -> str:
    """The text, which can be written as UTF-8. FileError where a name holds half a character."""
    try:
        text.encode("utf-8")
    except UnicodeEncodeError as error:
        raise FileError(f"{path}: not written: character {error.start} is no text that UTF-8 can hold") from error
    return text
