"""The bridge file: one TOML file describes one bridge, its bench steps and what was fitted from them (schema 1).

One rule: every fault is told with its path in the file, what was found and what is wanted, all faults at once. No
pydantic model leaves this module: what comes out are the frozen dataclasses of `calibration`.
"""

from __future__ import annotations

import math
import re
import shlex
import tomllib
import zlib
from collections.abc import Iterator
from dataclasses import dataclass, field, fields, replace
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, ValidationError

from calibration.bench import BenchRatings, BenchStep
from calibration.bridge import Bridge
from calibration.candidates import Limits
from calibration.errors import UnitError
from calibration.loads import load_impedance_ohm
from calibration.warmth import DIODES, DiodeKind

from .errors import FileError
from .faults import fault_in_words, short
from .fit_table import FitTable

__all__ = ["SCHEMA", "BridgeFile", "load_bridge_file", "parse_bridge_file", "sheet_text"]

SCHEMA = 1
#: A bench sheet of thousands of steps is still far below this [bytes].
_MOST_BYTES = 16_000_000
#: Keys of [bench] that bound what is proposed.
_RATINGS = ("dummy_w", "dummy_j", "resistor_w", "power_min_w", "power_max_w")
#: Faults told at once; with more of them it is another kind of file.
_MOST_FAULTS = 50


@dataclass(frozen=True, slots=True)
class BridgeFile:
    """A bridge file as read. `bridge` is None for a bench sheet, which has no [fit] yet."""

    source: str
    name: str
    full_scale: int
    z0_ohm: float
    detector: str
    ratings: BenchRatings
    steps: tuple[BenchStep, ...]
    bridge: Bridge | None
    device_id: int | None = None
    match_return_loss_db: float | None = None
    max_w: float | None = None
    reference_mv: int | None = None
    diode: DiodeKind | None = None
    fit_id: int | None = None
    fit_of: str | None = None
    limits: Limits = field(default_factory=Limits)

    @property
    def digest(self) -> str:
        """CRC-32 over all that a fit is made from: steps, references and what the bridge is."""
        head = self.full_scale, self.z0_ohm, self.detector, self.match_return_loss_db
        lines = "".join(f"{one!r}\n" for one in (*head, *map(_told, (self.diode, self.ratings, *self.steps))))
        return f"{zlib.crc32(lines.encode('utf-8')):08X}"

    @property
    def outdated(self) -> str | None:
        """A sentence where steps or references were changed after the fit; None where not, or the fit does not tell."""
        if self.fit_of in (None, self.digest):
            return None
        path = shlex.quote(self.source)
        return (
            f"steps or references in {self.source} were changed after its fit: run `bridgewright fit {path} -o {path}` "
            "to bring it up to date"
        )

    def calibrated(self) -> Bridge:
        """The fitted bridge. FileError for a sheet without [fit]."""
        if self.bridge is None:
            path = shlex.quote(self.source)
            raise FileError(
                f"{self.source}: is a bench sheet without [fit]; wanted a calibrated bridge file: "
                f"run `bridgewright fit {path} -o {path}` first"
            )
        return self.bridge


def load_bridge_file(path: str | Path) -> BridgeFile:
    """Read and validate a bridge file. FileError with every fault in words."""
    return parse_bridge_file(sheet_text(path), str(path))


def sheet_text(path: str | Path) -> str:
    """The text of a bridge file, unparsed. FileError where it cannot be read or is no text."""
    try:
        with open(path, "rb") as file:
            # A byte beyond the limit tells enough: what is named may be a device or a pipe without end.
            data = file.read(_MOST_BYTES + 1)
    except OSError as error:
        raise FileError(f"{path}: cannot be read: {error.strerror}; wanted a TOML bridge file") from error
    if len(data) > _MOST_BYTES:
        raise FileError(f"{path}: is larger than {_MOST_BYTES} bytes; wanted a TOML bridge file of some kilobytes")
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise FileError(
            f"{path}: byte {error.start} is not UTF-8 text; wanted a TOML bridge file; is this another kind of file?"
        ) from error


def parse_bridge_file(text: str, source: str, *, steps_only: bool = False) -> BridgeFile:
    """Validate the text of a bridge file; `source` names it in faults. FileError with every fault in words.

    steps_only: pass over a [fit], which is about to be made anew and may be wrong.
    """
    raw = _table_of(text, source)
    if steps_only:
        raw.pop("fit", None)
    faults, model = _validated(raw)
    table = None
    if isinstance(raw.get("fit"), dict):
        try:
            table = FitTable.read(raw["fit"], source)
        except FileError as error:
            faults.append(str(error).removeprefix(f"{source}: "))
    if faults or model is None:
        more = len(faults) - _MOST_FAULTS
        told = faults[:_MOST_FAULTS] + ([f"and {more} more faults"] if more > 0 else [])
        raise FileError(*(f"{source}: {fault}" for fault in told))
    return model.to_bridge_file(source, table)


def _table_of(text: str, source: str) -> dict[str, Any]:
    """TOML that claims to be a bridge file of a schema we read."""
    try:
        raw = tomllib.loads(text)
    except (ValueError, RecursionError) as error:
        # Besides TOML's own: a number of thousands of digits, tables nested by the thousand.
        why = error if isinstance(error, tomllib.TOMLDecodeError) else "it has a number or a nesting without end"
        raise FileError(f"{source}: is not TOML: {why}; wanted a bridge file, which starts with schema = 1") from error
    if not raw.keys() & {"schema", "bridge"}:
        raise FileError(
            f"{source}: has neither schema nor [bridge]; wanted a bridge file, which starts with schema = 1"
        )
    found = raw.get("schema")
    if isinstance(found, int) and found > SCHEMA:
        raise FileError(
            f"{source}: schema: found {short(found)}; this program reads {SCHEMA}: "
            "a newer one wrote it; update to read it"
        )
    return raw


def _validated(raw: dict[str, Any]) -> tuple[list[str], _FileModel | None]:
    """All faults of the table in words, and the model where pydantic finds none."""
    of_steps = [*_head_faults(raw), *_step_faults(raw)]
    try:
        return of_steps, _FileModel.model_validate(raw)
    except ValidationError as error:
        return [fault_in_words(one, _KNOWN) for one in error.errors(include_url=False)] + of_steps, None


def _frequency(value: float) -> float:
    low, high = _FREQUENCIES_HZ
    if low <= value <= high:
        return value
    unit, scale = ("MHz", 1e6) if value < 1e3 else ("kHz", 1e3)
    meant = value * scale
    hint = f"; did you mean {meant:.0f} ({value:g} {unit})?" if low <= meant <= high else ""
    raise ValueError(f"found {value:g}; wanted hertz, from {low:.0f} to {high:.0f}{hint}")


def _load(value: str) -> str:
    try:
        ohm = load_impedance_ohm(value)
    except UnitError:
        ohm = complex("nan")
    if not math.isfinite(abs(ohm)) and value.strip().lower() != "open":
        raise ValueError(f"found {short(value)}; wanted ohms like 100 or 24.87, R+Xj like 25+3.5j, open or short")
    return value


def _device_id(value: str) -> str:
    if not re.fullmatch("[0-9A-Fa-f]{1,8}", value) or int(value, 16) == 0:
        raise ValueError(
            f"found {short(value)}; wanted 1 to 8 hexadecimal digits, not all 0, as the board's nameplate has them"
        )
    return value


_FREQUENCIES_HZ = (1e5, 1e10)
_Positive = Annotated[float, Field(gt=0.0)]
_NotNegative = Annotated[float, Field(ge=0.0)]
_Percent = Annotated[float, Field(ge=0.0, le=100.0)]
_ReturnLoss = Annotated[float, Field(ge=3.0, le=80.0)]
_Frequency = Annotated[float, AfterValidator(_frequency)]
_DeviceId = Annotated[str, AfterValidator(_device_id)]


class _Model(BaseModel):
    model_config = ConfigDict(strict=True, extra="forbid", frozen=True, allow_inf_nan=False)


class _BridgeModel(_Model):
    name: Annotated[str, Field(min_length=1, max_length=200)]
    full_scale: Annotated[int, Field(ge=255, le=2**32 - 1)]
    z0_ohm: Annotated[float, Field(ge=10.0, le=1000.0)] = 50.0
    detector: Literal["diode", "log", "table"]
    diode: Literal["schottky", "germanium", "silicon"] | None = None
    eg_ev: _Positive | None = None
    xti: _Positive | None = None
    n: _Positive | None = None
    max_w: _Positive | None = None
    hold_ms: _NotNegative | None = None
    reference_mv: Annotated[int, Field(ge=100, le=65535)] | None = None
    device_id: _DeviceId | None = None
    match_return_loss_db: _ReturnLoss | None = None


class _BenchModel(_Model):
    reference_pct: _Percent = 5.0
    reference_full_scale_w: _Positive | None = None
    dummy_return_loss_db: _ReturnLoss = 30.0
    resistor_pct: _Percent = 1.0
    dummy_w: _Positive | None = None
    dummy_j: _Positive | None = None
    resistor_w: _Positive | None = None
    power_min_w: _Positive | None = None
    power_max_w: _Positive | None = None


class _StepModel(_Model):
    kind: Literal["dark", "power", "reversed", "load"]
    frequency_hz: _Frequency | None = None
    power_w: _Positive | None = None
    power_pct: _Percent | None = None
    volts: _Positive | None = None
    volts_kind: Literal["rms", "peak"] | None = None
    dummy_ohm: _Positive | None = None
    load: Annotated[str, AfterValidator(_load)] | None = None
    load_pct: _Percent | None = None
    load_nh: _NotNegative | None = None
    load_pf: _NotNegative | None = None
    line_deg: Annotated[float, Field(ge=0.0, le=360.0)] = 0.0
    line_loss_db: Annotated[float, Field(ge=0.0, le=10.0)] | None = None
    forward: Annotated[float, Field(ge=0.0, le=2**32)]
    forward_sd: _NotNegative = 1.0
    reflected: Annotated[float, Field(ge=0.0, le=2**32)]
    reflected_sd: _NotNegative = 1.0
    samples: Annotated[int, Field(ge=1, le=10**9)] = 1
    temperature_c: Annotated[float, Field(ge=-60.0, le=150.0)] = 25.0


class _FileModel(_Model):
    schema_: Annotated[int, Field(alias="schema", ge=SCHEMA, le=SCHEMA)]
    bridge: _BridgeModel
    bench: _BenchModel = _BenchModel()
    step: list[_StepModel] = []
    fit: dict[str, Any] | None = None

    def to_bridge_file(self, source: str, table: FitTable | None) -> BridgeFile:
        """The dataclasses that floor 0 and the rest of the program know."""
        head, bench = self.bridge, self.bench
        ratings = BenchRatings(
            bench.reference_pct, bench.reference_full_scale_w, bench.dummy_return_loss_db, bench.resistor_pct
        )
        device_id = None if head.device_id is None else int(head.device_id, 16)
        diode = _diode_of(head)
        return BridgeFile(
            source=source,
            name=head.name,
            full_scale=head.full_scale,
            z0_ohm=head.z0_ohm,
            detector=head.detector,
            ratings=ratings,
            steps=tuple(BenchStep(**step.model_dump()) for step in self.step),
            bridge=table.bridge(head.name, head.full_scale, head.z0_ohm, device_id, diode) if table else None,
            diode=diode,
            device_id=device_id,
            match_return_loss_db=head.match_return_loss_db,
            max_w=head.max_w,
            reference_mv=head.reference_mv,
            fit_id=table.id if table else None,
            fit_of=table.steps if table else None,
            limits=Limits(max_w=head.max_w, **{name: getattr(bench, name) for name in _RATINGS}),
        )


def _told(one: DiodeKind | BenchRatings | BenchStep | None) -> list[tuple[str, Any]] | None:
    """What is told of something beyond its defaults, so that fields which later versions add change no digest."""
    if one is None:
        return None
    members = ((member, getattr(one, member.name)) for member in fields(one))
    return [(member.name, value) for member, value in members if value != member.default]


def _diode_of(head: _BridgeModel) -> DiodeKind | None:
    """Temperature behaviour of the diode named, with what the builder knows better of it."""
    if head.diode is None:
        return None
    told = {"eg_ev": head.eg_ev, "xti": head.xti, "n": head.n}
    return replace(DIODES[head.diode], **{key: value for key, value in told.items() if value is not None})


def _head_faults(raw: dict[str, Any]) -> Iterator[str]:
    """What contradicts within [bridge]."""
    head = raw.get("bridge")
    if isinstance(head, dict) and "diode" not in head:
        for key in ("eg_ev", "xti", "n"):
            if key in head:
                yield f"bridge.{key}: refines a diode that is not named; wanted diode = one of {', '.join(DIODES)} too"


def _step_faults(raw: dict[str, Any]) -> Iterator[str]:
    """What contradicts within a step; told from the raw table, so that other faults hide none of it."""
    head, steps = raw.get("bridge"), raw.get("step")
    most = head.get("full_scale") if isinstance(head, dict) else None
    for number, step in enumerate(steps if isinstance(steps, list) else [], 1):
        if isinstance(step, dict):
            yield from (f"step[{number}]{fault}" for fault in [*_kind_faults(step), *_count_faults(step, most)])


def _kind_faults(step: dict[str, Any]) -> Iterator[str]:
    """What a step lacks for its kind, or has too much of."""
    kind = step.get("kind")
    if not isinstance(kind, str) or kind not in _NEEDS:
        return
    for keys, what in _NEEDS[kind]:
        if not step.keys() & set(keys):
            yield f": a {kind} step also needs {what}"
    for key, why in _MUST_NOT[kind].items():
        if key in step:
            yield f".{key}: a {kind} step has none, as {why}"
    if "volts" in step and "volts_kind" not in step:
        yield ': volts also need volts_kind, "rms" or "peak"'
    if {"power_w", "volts"} <= step.keys():
        yield ": has power_w and volts; wanted one of them"


def _count_faults(step: dict[str, Any], most: object) -> Iterator[str]:
    """Counts above full scale: of another converter, or a slip of the hand."""
    for key in ("forward", "reflected"):
        count = step.get(key)
        if isinstance(count, int | float) and isinstance(most, int) and most < count < math.inf:
            yield f".{key}: found {short(count)}; wanted at most full_scale, {short(most)} (mean counts)"


_HERTZ = (("frequency_hz",), "frequency_hz (hertz)")
_WATTS = (("power_w", "volts"), "power_w (watts, the wattmeter's reading) or volts across the dummy load")
#: kind of step -> keys of which it needs one, and how to say so.
_NEEDS: dict[str, tuple[tuple[tuple[str, ...], str], ...]] = {
    "dark": (),
    "power": (_HERTZ, _WATTS),
    "reversed": (_HERTZ, _WATTS),
    "load": (_HERTZ, (("load",), 'load (ohms, like "100", "open" or "short")')),
}
#: kind of step -> keys that contradict it, and why.
_MUST_NOT: dict[str, dict[str, str]] = {
    "dark": dict.fromkeys(("frequency_hz", "power_w", "volts", "load"), "the transmitter is off"),
    "power": {"load": "it is taken into the dummy load"},
    "reversed": {"load": "it is taken into the dummy load"},
    "load": {},
}
_MODELS: dict[str, type[_Model]] = {"": _FileModel, "bridge": _BridgeModel, "bench": _BenchModel, "step": _StepModel}
#: table -> keys known there.
_KNOWN = {
    table: [field.alias or name for name, field in model.model_fields.items()] for table, model in _MODELS.items()
}
