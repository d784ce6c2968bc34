"""The [fit] table of a bridge file: what a fit found, so that a reading needs no fit.

One rule: the numbers carry an id over themselves as written, so that a changed digit, or a board that carries another
calibration, is noticed.
"""

from __future__ import annotations

import json
import math
import os
import re
import shlex
import tempfile
import tomllib
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any

import numpy as np

from calibration import __version__
from calibration.bridge import Band, Bridge
from calibration.fit import Fit
from calibration.laws import LAWS, Law
from calibration.warmth import DiodeKind

from .errors import FileError
from .framing import crc16

__all__ = ["FitTable", "toml_text", "write_fit", "write_whole"]

#: The numbers of a band in the file, beside its covariance.
_BAND_KEYS = (
    "frequency_hz",
    "gain_forward",
    "gain_reflected",
    "directivity",
    "directivity_limit",
    "forward_leak",
    "forward_leak_limit",
    "angle_cosine",
)
_SIDES = ("forward", "reflected")
#: The numbers of a fit that belong to no side and no band.
_PLAIN_NUMBERS = ("reference_pct", "temperature_c", "temperature_span_c")
#: What a bench at two temperatures has taught of the diodes; only there, and it goes before what `diode` names.
_DIODE_NUMBERS = ("eg_ev", "xti", "n")
#: The comment above the table; found again, and not doubled, when a file is fitted anew.
_MARK = "# Written by `bridgewright fit`; not meant to be edited: id tells when a number has changed."
_TABLE = re.compile(r"[ \t]*\[")
_FIT_TABLE = re.compile(r"[ \t]*\[\[?[ \t]*(fit|\"fit\"|'fit')[ \t]*[.\]]")


@dataclass(frozen=True, slots=True)
class FitTable:
    """A [fit] table: its id and its plain content."""

    id: int
    content: dict[str, Any]

    @classmethod
    def of_fit(cls, fit: Fit, written: datetime, steps: str) -> FitTable:
        """The table of a fit done now; `steps` is the digest of what it was made from (`BridgeFile.digest`)."""
        bridge = fit.bridge
        content: dict[str, Any] = {
            "date": written.isoformat(timespec="seconds"),
            "program": f"bridgewright {__version__}",
            "steps": steps,
            "reference_pct": bridge.reference_pct,
            "reference_scatter_pct": 100.0 * fit.reference_scatter,
            "temperature_c": bridge.temperature_c,
            "temperature_span_c": bridge.temperature_span_c,
            "forward": _side_of(bridge, "forward"),
            "reflected": _side_of(bridge, "reflected"),
            "band": [_band_of(band) for band in bridge.bands],
            "residual": [{"step": r.step + 1, "what": r.what, "sigmas": round(r.sigmas, 3)} for r in fit.residuals],
            "notes": list(fit.notes),
        }
        if fit.diode is not None:
            content |= {name: getattr(fit.diode, name) for name in _DIODE_NUMBERS}
        return cls(_id_of(content), content)

    @classmethod
    def read(cls, content: dict[str, Any], source: str) -> FitTable:
        """The table as found in a file. FileError where it is not whole or its numbers have changed."""
        path = shlex.quote(source)
        again = f"run `bridgewright fit {path} -o {path}` to write it anew"
        try:
            found, expected = int(str(content["id"]), 16), _id_of(content)
            table = cls(found, content)
            if found == expected:
                table.bridge("", 1, 50.0, None)
        except (AttributeError, KeyError, TypeError, ValueError, OverflowError) as error:
            raise FileError(f"{source}: fit: is not whole ({type(error).__name__}: {error}); {again}") from error
        if found != expected:
            raise FileError(
                f"{source}: fit.id: found {found:04X}, but its numbers give {expected:04X}: "
                f"they were changed after the fit; {again}"
            )
        return table

    @property
    def steps(self) -> str | None:
        """Digest of what the fit was made from; None where an older version has not kept it."""
        told = self.content.get("steps")
        return None if told is None else str(told)

    def bridge(
        self, name: str, full_scale: int, z0_ohm: float, device_id: int | None, diode: DiodeKind | None = None
    ) -> Bridge:
        """The calibrated bridge. KeyError, TypeError or ValueError where the table is not whole: see `read`."""
        laws = {side: self._law(side) for side in _SIDES}
        if _DIODE_NUMBERS[0] in self.content:
            diode = DiodeKind(*(float(self.content[name]) for name in _DIODE_NUMBERS))
        return Bridge(
            name=name,
            full_scale=full_scale,
            forward_law=laws["forward"],
            reflected_law=laws["reflected"],
            bands=self._bands(sum(len(law.parameters) + 1 for law in laws.values())),
            z0_ohm=z0_ohm,
            forward_sd=float(self.content["forward"]["sd"]),
            reflected_sd=float(self.content["reflected"]["sd"]),
            reference_pct=float(self.content["reference_pct"]),
            device_id=device_id,
            diode=diode,
            temperature_c=float(self.content["temperature_c"]),
            temperature_span_c=float(self.content["temperature_span_c"]),
        )

    def _law(self, side: str) -> Law:
        table = self.content[side]
        law: Law = LAWS[table["law"]].from_table(table)
        with np.errstate(all="ignore"):  # of the logarithm of what must be positive and is not
            if not np.isfinite(law.parameters).all():
                raise ValueError(f"the {side} law has a number out of range")
        return law

    def _bands(self, size: int) -> tuple[Band, ...]:
        """The bands, each with a covariance of `size` parameters."""
        bands = tuple(_band_from(band) for band in self.content["band"])
        if not bands:
            raise ValueError("no band")
        for number, band in enumerate(bands, 1):
            if band.covariance.shape != (size, size):
                raise ValueError(f"band {number} has another covariance than {size} parameters need")
        return bands


def write_fit(path: str | Path, sheet: str, table: FitTable) -> None:
    """Write the text of a bench sheet with `table` as its [fit] to `path`; comments and steps stay as they are.

    FileError where its own [fit] cannot be told from the rest, or nothing can be written.
    """
    kept = _without_fit(sheet)
    before = tomllib.loads(sheet)
    before.pop("fit", None)
    # The same after as before, or nothing is written: what was measured is not to be measured again.
    if _or_none(kept) != before:
        raise FileError(
            f"{path}: not written: the sheet holds [fit] in a form this program does not write; "
            "wanted [fit] and [[fit.band]] as tables: remove it by hand"
        )
    ends = "\r\n" if "\r\n" in sheet else "\n"
    write_whole(path, kept.rstrip() + ends + ends + _dumps(table).replace("\n", ends))


def _without_fit(sheet: str) -> str:
    """The lines of a sheet without its fit tables; comments that stand before what follows them are kept."""
    kept: list[str] = []
    remarks: list[str] = []
    cutting = False
    for line in sheet.split("\n"):
        if _TABLE.match(line):
            cutting = bool(_FIT_TABLE.match(line))
            kept += [] if cutting else remarks
            remarks = []
        if line.rstrip() == _MARK:
            continue
        if not cutting:
            kept.append(line)
        elif not line.strip() or line.lstrip().startswith("#"):
            remarks.append(line)
        else:
            remarks = []
    return "\n".join(kept + remarks)


def _or_none(text: str) -> dict[str, Any] | None:
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError:
        return None


def write_whole(path: str | Path, text: str) -> None:
    """Write a file whole or not at all: temporary file beside it, synced, renamed. FileError if that fails."""
    target = Path(path)
    if target.exists() and not target.is_file():
        raise FileError(f"{path}: is no file that could be replaced; wanted the name of a file, new or old")
    try:
        handle, temporary = tempfile.mkstemp(prefix=f".{target.name}.", dir=target.parent)
        try:
            with os.fdopen(handle, "w", encoding="utf-8", newline="") as file:
                file.write(text)
                file.flush()
                os.fsync(file.fileno())
            # mkstemp makes it private; a bridge file is as readable as what it replaces, or as any new file.
            os.chmod(temporary, target.stat().st_mode & 0o777 if target.exists() else 0o666 & ~_umask())
            os.replace(temporary, target)
        except BaseException:
            os.unlink(temporary)
            raise
    except OSError as error:
        raise FileError(f"{path}: cannot be written: {error.strerror}; what was there before is unchanged") from error


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def _dumps(table: FitTable) -> str:
    """The table as TOML, written by hand for its layout: a line a band, a line a residual."""
    lines = [_MARK, "[fit]", f'id = "{table.id:04X}"']
    content = table.content
    taught = [name for name in _DIODE_NUMBERS if name in content]
    plain = ("date", "program", "steps", *_PLAIN_NUMBERS, "reference_scatter_pct", *taught)
    lines += [f"{key} = {_value(content[key])}" for key in plain if key in content]
    lines += ["notes = [", *(f"  {_value(note)}," for note in content["notes"]), "]"]
    lines += ["residual = ["]
    lines += [f"  {{ {', '.join(f'{k} = {_value(v)}' for k, v in row.items())} }}," for row in content["residual"]]
    lines += ["]"]
    for side in _SIDES:
        lines += ["", f"[fit.{side}]", *(f"{key} = {_value(value)}" for key, value in content[side].items())]
    for band in content["band"]:
        lines += ["", "[[fit.band]]", *(f"{key} = {_value(value)}" for key, value in band.items())]
    return "\n".join(lines) + "\n"


def _value(value: object) -> str:
    if isinstance(value, list):
        return f"[{', '.join(_value(one) for one in value)}]"
    return toml_text(value) if isinstance(value, str) else repr(value)


def toml_text(text: str) -> str:
    """Text in quotes as TOML wants it: JSON's escapes are TOML's, but for DEL, which JSON lets pass."""
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")


def _side_of(bridge: Bridge, side: str) -> dict[str, Any]:
    law = bridge.forward_law if side == "forward" else bridge.reflected_law
    name = next(name for name, kind in LAWS.items() if isinstance(law, kind))
    sd = bridge.forward_sd if side == "forward" else bridge.reflected_sd
    return {"law": name, "sd": float(sd)} | law.table()


def _band_of(band: Band) -> dict[str, Any]:
    lower = band.covariance[np.tril_indices(len(band.covariance))]
    return {key: float(getattr(band, key)) for key in _BAND_KEYS} | {"covariance": [float(value) for value in lower]}


def _band_from(table: dict[str, Any]) -> Band:
    lower = [float(value) for value in table["covariance"]]
    size = (math.isqrt(8 * len(lower) + 1) - 1) // 2
    covariance = np.zeros((size, size))
    covariance[np.tril_indices(size)] = lower
    covariance = covariance + np.tril(covariance, -1).T
    numbers: dict[str, Any] = {key: float(table[key]) for key in _BAND_KEYS}
    if not np.isfinite([*numbers.values(), *lower]).all():
        raise ValueError("a band holds a number that is not finite")
    return Band(**numbers, covariance=covariance)


def _id_of(content: dict[str, Any]) -> int:
    """CRC-16 over the fitted numbers, one a line: keys sorted, shortest round-trip decimals; 0 becomes 1."""
    numbers = {key: content[key] for key in _PLAIN_NUMBERS}
    numbers |= {key: content[key] for key in _DIODE_NUMBERS if key in content}
    for side in _SIDES:
        for key, value in content[side].items():
            numbers |= _numbers_of(f"{side}.{key}", value)
    for place, band in enumerate(content["band"]):
        numbers |= {f"band.{place}.{key}": band[key] for key in _BAND_KEYS}
        numbers |= {f"band.{place}.covariance.{n}": value for n, value in enumerate(band["covariance"])}
    lines = "".join(f"{key} = {float(numbers[key])!r}\n" for key in sorted(numbers))
    return crc16(lines.encode("ascii")) or 1


def _numbers_of(key: str, value: Any) -> dict[str, float]:
    """The numbers of one key: itself, or a list's members by their place; texts have none."""
    if isinstance(value, list):
        return {f"{key}.{place}": float(one) for place, one in enumerate(value)}
    return {} if isinstance(value, str) else {key: float(value)}
