"""The bridge file: one TOML file describes one bridge, its bench steps and what was fitted from them (schema 1).

One rule: every fault is told with its path in the file, what was found and what is wanted, all faults at once. No
pydantic model leaves this module: what comes out are the frozen dataclasses of `calibration`.
"""

from __future__ import annotations

import difflib
import tomllib
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, ValidationError, model_validator

from calibration.bench import BenchRatings, BenchStep
from calibration.bridge import Bridge
from calibration.errors import UnitError
from calibration.loads import load_impedance_ohm

from .errors import FileError
from .fit_table import FitTable

__all__ = ["SCHEMA", "BridgeFile", "load_bridge_file", "parse_bridge_file", "sheet_text"]

SCHEMA = 1
#: A bench sheet of thousands of steps is still far below this [bytes].
_MOST_BYTES = 16_000_000


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
    fit_id: int | None = None

    def calibrated(self) -> Bridge:
        """The fitted bridge. FileError for a sheet without [fit]."""
        if self.bridge is None:
            raise FileError(
                f"{self.source}: is a bench sheet without [fit]; wanted a calibrated bridge file: "
                f"run `bridgewright fit {self.source} -o {self.source}` first"
            )
        return self.bridge


def load_bridge_file(path: str | Path) -> BridgeFile:
    """Read and validate a bridge file. FileError with every fault in words."""
    return parse_bridge_file(sheet_text(path), str(path))


def sheet_text(path: str | Path) -> str:
    """The text of a bridge file, unparsed. FileError where it cannot be read or is no text."""
    name = str(path)
    try:
        if Path(path).stat().st_size > _MOST_BYTES:
            raise FileError(
                f"{name}: is {Path(path).stat().st_size} bytes; wanted a TOML bridge file of a few kilobytes"
            )
        return Path(path).read_bytes().decode("utf-8")
    except UnicodeDecodeError as error:
        raise FileError(
            f"{name}: byte {error.start} is not UTF-8 text; wanted a TOML bridge file; is this another kind of file?"
        ) from error
    except OSError as error:
        raise FileError(f"{name}: cannot be read: {error.strerror}; wanted a TOML bridge file") from error


def parse_bridge_file(text: str, source: str) -> BridgeFile:
    """Validate the text of a bridge file; `source` names it in faults. FileError with every fault in words."""
    try:
        raw = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise FileError(
            f"{source}: is not TOML: {error}; wanted a bridge file, which starts with schema = 1"
        ) from error
    _check_schema(raw, source)
    try:
        model = _FileModel.model_validate(raw)
    except ValidationError as error:
        faults = [_fault(one) for one in error.errors(include_url=False)]
        raise FileError("\n".join(f"{source}: {fault}" for fault in faults)) from error
    return model.to_bridge_file(source)


def _check_schema(raw: dict[str, Any], source: str) -> None:
    found = raw.get("schema")
    if isinstance(found, int) and not isinstance(found, bool) and found > SCHEMA:
        raise FileError(
            f"{source}: schema: found {found}; this program reads {SCHEMA}: a newer one wrote it; update to read it"
        )


def _frequency(value: float) -> float:
    if value < 1e5:
        scale = 1e6 if value < 1e3 else 1e3
        raise ValueError(
            f"wanted hertz, from 100000 up; did you mean {value * scale:.0f} ({value:g} {_PREFIX[scale]})?"
        )
    return value


def _load(value: str) -> str:
    try:
        load_impedance_ohm(value)
    except UnitError as error:
        raise ValueError(f"wanted ohms like 100 or 24.87, R+Xj like 25+3.5j, open or short ({error})") from error
    return value


_PREFIX = {1e6: "MHz", 1e3: "kHz"}
_Positive = Annotated[float, Field(gt=0.0)]
_NotNegative = Annotated[float, Field(ge=0.0)]
_Percent = Annotated[float, Field(ge=0.0, le=100.0)]
_ReturnLoss = Annotated[float, Field(ge=3.0, le=80.0)]
_Frequency = Annotated[float, Field(le=1e10), AfterValidator(_frequency)]
_HexId = Annotated[str, Field(pattern=r"^[0-9A-Fa-f]{1,8}$")]


class _Model(BaseModel):
    model_config = ConfigDict(strict=True, extra="forbid", frozen=True, allow_inf_nan=False)


class _BridgeModel(_Model):
    name: Annotated[str, Field(min_length=1, max_length=200)]
    full_scale: Annotated[int, Field(ge=255, le=2**32 - 1)]
    z0_ohm: Annotated[float, Field(ge=10.0, le=1000.0)] = 50.0
    detector: Literal["diode"]
    diode: Literal["schottky", "germanium", "silicon"] | None = None
    eg_ev: _Positive | None = None
    xti: _Positive | None = None
    n: _Positive | None = None
    max_w: _Positive | None = None
    hold_ms: _NotNegative | None = None
    reference_mv: Annotated[int, Field(ge=100, le=65535)] | None = None
    device_id: _HexId | None = None
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
    samples: Annotated[int, Field(ge=1)] = 1
    temperature_c: Annotated[float, Field(ge=-60.0, le=150.0)] = 25.0

    @model_validator(mode="after")
    def _complete(self) -> _StepModel:
        missing = []
        if self.kind != "dark" and self.frequency_hz is None:
            missing.append("frequency_hz (hertz)")
        if self.kind in ("power", "reversed") and self.power_w is None and self.volts is None:
            missing.append("power_w (watts, the wattmeter's reading) or volts across the dummy load")
        if self.volts is not None and self.volts_kind is None:
            missing.append('volts_kind ("rms" or "peak")')
        if self.kind == "load" and self.load is None:
            missing.append('load (ohms like "100", "open" or "short")')
        if missing:
            raise ValueError(f"a {self.kind} step also needs {' and '.join(missing)}")
        if self.power_w is not None and self.volts is not None:
            raise ValueError("has power_w and volts; wanted one of them")
        return self


class _FileModel(_Model):
    schema_: Annotated[int, Field(alias="schema", ge=SCHEMA, le=SCHEMA)]
    bridge: _BridgeModel
    bench: _BenchModel = _BenchModel()
    step: list[_StepModel] = []
    fit: dict[str, Any] | None = None

    def to_bridge_file(self, source: str) -> BridgeFile:
        """The dataclasses that floor 0 and the rest of the program know."""
        head, bench = self.bridge, self.bench
        ratings = BenchRatings(
            bench.reference_pct, bench.reference_full_scale_w, bench.dummy_return_loss_db, bench.resistor_pct
        )
        device_id = None if head.device_id is None else int(head.device_id, 16)
        table = None if self.fit is None else FitTable.read(self.fit, source)
        return BridgeFile(
            source=source,
            name=head.name,
            full_scale=head.full_scale,
            z0_ohm=head.z0_ohm,
            detector=head.detector,
            ratings=ratings,
            steps=tuple(BenchStep(**step.model_dump()) for step in self.step),
            bridge=table.bridge(head.name, head.full_scale, head.z0_ohm, device_id) if table else None,
            device_id=device_id,
            match_return_loss_db=head.match_return_loss_db,
            max_w=head.max_w,
            fit_id=table.id if table else None,
        )


#: What a key wants, in a reader's words, where the type alone does not say it.
_UNITS = {
    "full_scale": "the largest count a tally can hold",
    "z0_ohm": "ohms",
    "power_w": "watts",
    "max_w": "watts",
    "frequency_hz": "hertz",
    "forward": "mean counts",
    "reflected": "mean counts",
    "reference_pct": "percent",
    "resistor_pct": "percent",
    "dummy_return_loss_db": "decibels",
    "match_return_loss_db": "decibels",
    "temperature_c": "degrees Celsius",
    "line_deg": "degrees",
    "load": 'text like "100"',
    "samples": "a whole number",
}
_MODELS: dict[str, type[_Model]] = {"bridge": _BridgeModel, "bench": _BenchModel, "step": _StepModel}


def _fault(error: Any) -> str:
    """One pydantic error in our words: path, what was found, what is wanted."""
    where = _path(error["loc"])
    say = _WORDS.get(error["type"])
    return f"{where}: {say(error)}" if say else f"{where}: found {error['input']!r}; {error['msg']}"


def _path(loc: tuple[int | str, ...]) -> str:
    """step[3].power_w: steps are counted from 1, as people do."""
    text = ""
    for part in loc:
        text += f"[{part + 1}]" if isinstance(part, int) else f".{part}" if text else str(part)
    return text or "file"


def _wanted(error: Any, what: str) -> str:
    unit = _UNITS.get(str(error["loc"][-1])) if error["loc"] else None
    return f"found {_short(error['input'])}; wanted {what}{f' ({unit})' if unit else ''}"


def _short(value: object) -> str:
    text = repr(value)
    return text if len(text) <= 60 else f"{text[:57]}..."


def _limits(error: Any) -> str:
    limits = error.get("ctx", {})
    words = {"gt": "more than", "ge": "at least", "lt": "less than", "le": "at most"}
    return _wanted(error, " and ".join(f"{words[key]} {limits[key]:g}" for key in words if key in limits))


def _extra(error: Any) -> str:
    loc = error["loc"]
    model = _FileModel if len(loc) == 1 else _MODELS.get(str(loc[0]), _FileModel)
    known = [field.alias or name for name, field in model.model_fields.items()]
    near = difflib.get_close_matches(str(loc[-1]), known, n=1, cutoff=0.5)
    hint = f"did you mean {near[0]}?" if near else f"known here: {', '.join(known)}"
    return f"no such key; {hint}"


def _missing(error: Any) -> str:
    unit = _UNITS.get(str(error["loc"][-1]))
    return f"is missing{f'; wanted {unit}' if unit else ''}"


_WORDS: dict[str, Callable[[Any], str]] = {
    "missing": _missing,
    "extra_forbidden": _extra,
    "float_type": lambda error: _wanted(error, "a number"),
    "int_type": lambda error: _wanted(error, "a whole number"),
    "string_type": lambda error: _wanted(error, "text in quotes"),
    "finite_number": lambda error: _wanted(error, "a finite number"),
    "literal_error": lambda error: _wanted(error, f"one of {error['ctx']['expected']}"),
    "string_pattern_mismatch": lambda error: _wanted(error, "1 to 8 hexadecimal digits"),
    "value_error": lambda error: f"{str(error['msg']).removeprefix('Value error, ')}",
    "greater_than": _limits,
    "greater_than_equal": _limits,
    "less_than": _limits,
    "less_than_equal": _limits,
    "model_type": lambda error: _wanted(error, "a table"),
    "dict_type": lambda error: _wanted(error, "a table"),
    "list_type": lambda error: _wanted(error, "[[step]] tables"),
}
