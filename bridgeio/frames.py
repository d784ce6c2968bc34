"""What can come over the wire, as frozen dataclasses, and the one table of kinds that everything else reads.

One rule: a layout stands here once. Encoder, decoder, text twin and tests take it from `KINDS`; `WIRE.md`
tells it to people.
"""

from __future__ import annotations

import struct
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from functools import cached_property
from typing import Any, TypeAlias

import numpy as np
import numpy.typing as npt

from bridgeio.codes import (
    FLAG_DROPPED,
    FLAG_FORWARD_CLIPPED,
    FLAG_KEY,
    FLAG_REFERENCE,
    FLAG_REFLECTED_CLIPPED,
)

__all__ = [
    "FLAG_DROPPED",
    "FLAG_FORWARD_CLIPPED",
    "FLAG_KEY",
    "FLAG_REFERENCE",
    "FLAG_REFLECTED_CLIPPED",
    "HEAD",
    "KINDS",
    "KIND_BY_NUMBER",
    "MAJOR",
    "RESERVED_KIND",
    "TEMPERATURE_UNKNOWN",
    "Conditions",
    "Crest",
    "Item",
    "Kind",
    "Nameplate",
    "Remark",
    "Tallies",
    "Unknown",
    "kind_of",
]

#: Major version of the wire: the high nibble of every kind.
MAJOR = 1
#: Never sent in this version: keeps room for a longer kind.
RESERVED_KIND = 0x1F
#: kind, seq, ms: how every payload of major version 1 begins.
HEAD = "kind:B seq:B ms:I"

#: In a conditions frame: the bridge does not know its temperature.
TEMPERATURE_UNKNOWN = -32768


@dataclass(frozen=True, slots=True, eq=False)
class Tallies:
    """Counts of n tallies in the order they came: arrays of one length n, because they come by the thousand.

    seq: uint8; ms: uint32, device time [ms], 0 where `has_ms` is False; forward, reflected: float64 [counts],
    since a plain line may carry a fraction; flags: uint8. `checked` is False for plain lines (no check on the
    wire), `wide` is True for kind 0x15.
    """

    seq: npt.NDArray[np.uint8]
    ms: npt.NDArray[np.uint32]
    forward: npt.NDArray[np.float64]
    reflected: npt.NDArray[np.float64]
    flags: npt.NDArray[np.uint8]
    checked: bool = True
    has_ms: bool = True
    wide: bool = False

    def __len__(self) -> int:
        """How many tallies there are."""
        return len(self.seq)

    @classmethod
    def of(
        cls,
        seq: npt.ArrayLike,
        ms: npt.ArrayLike,
        forward: npt.ArrayLike,
        reflected: npt.ArrayLike,
        flags: npt.ArrayLike = 0,
        **marks: bool,
    ) -> Tallies:
        """Tallies from numbers or sequences, one tally or n; `ms` [ms] and `seq` wrap as on the wire.

        `marks` are checked, has_ms and wide.
        """
        length = np.broadcast_shapes(*(np.atleast_1d(x).shape for x in (seq, ms, forward, reflected, flags)))

        def column(values: npt.ArrayLike, kind: type[np.generic], wrap: int = 0) -> npt.NDArray[Any]:
            array = np.atleast_1d(np.asarray(values))
            return np.broadcast_to(array % wrap if wrap else array, length).astype(kind)

        return cls(
            column(seq, np.uint8, 1 << 8),
            column(ms, np.uint32, 1 << 32),
            column(forward, np.float64),
            column(reflected, np.float64),
            column(flags, np.uint8),
            **marks,
        )

    @classmethod
    def from_records(cls, records: npt.NDArray[Any], **marks: bool) -> Tallies:
        """Tallies from a structured array[n] with the fields seq, ms, forward, reflected and flags."""
        return cls(
            records["seq"].copy(),
            records["ms"].astype(np.uint32),
            records["forward"].astype(np.float64),
            records["reflected"].astype(np.float64),
            records["flags"].copy(),
            **marks,
        )


@dataclass(frozen=True, slots=True)
class Nameplate:
    """How the bridge describes itself. 0 in boot, device_id, reference_mv or bridge_file_id: not known."""

    seq: int
    ms: int
    minor: int
    boot: int
    device_id: int
    period_ms: int
    summed: int
    full_scale: int
    reference_mv: int
    features: int
    bridge_file_id: int
    firmware_version: int
    name: str


@dataclass(frozen=True, slots=True)
class Crest:
    """Mean and highest conversion of a stretch of time [counts of a tally]; `wide` is True for kind 0x17."""

    seq: int
    ms: int
    forward_mean: int
    reflected_mean: int
    forward_crest: int
    reflected_at_crest: int
    conversions: int
    flags: int
    wide: bool = False


@dataclass(frozen=True, slots=True)
class Remark:
    """Something the bridge has to say; codes in `REMARK_CODES`, the text is outside text and kept raw."""

    seq: int
    ms: int
    code: int
    argument: int
    text: str


@dataclass(frozen=True, slots=True)
class Conditions:
    """Surroundings: temperature [0.01 degC], supply [mV] (0 not known), frequency [Hz] (0 not known)."""

    seq: int
    ms: int
    temperature_c100: int
    supply_mv: int
    frequency_hz: int


@dataclass(frozen=True, slots=True)
class Unknown:
    """A sound frame of a kind this program does not know, kept as bytes.

    `text` is True when it came as a text twin: then the numbers in `payload` are big-endian.
    """

    kind: int
    payload: bytes
    text: bool = False

    @property
    def seq(self) -> int:
        """Sequence number from the head."""
        return self.payload[1]

    @property
    def ms(self) -> int:
        """Device time from the head [ms]."""
        return int.from_bytes(self.payload[2:6], "big" if self.text else "little")


Frame: TypeAlias = Nameplate | Crest | Remark | Conditions
Item: TypeAlias = Tallies | Frame | Unknown


@dataclass(frozen=True)
class Kind:
    """One row of the table of kinds.

    `layout` lists the fields after the head as `name:code`, codes as in the struct module. `text_limit`
    [bytes] is above zero where the last field is the length of a text that follows. `size` [bytes] is the
    shortest payload of the kind's first version.
    """

    number: int
    name: str
    frame: Callable[..., Item]
    layout: str
    wide: bool = False
    text_limit: int = 0

    @cached_property
    def fields(self) -> tuple[tuple[str, str], ...]:
        """All fields of the payload, head included, as (name, struct code)."""
        pairs = (field.split(":") for field in f"{HEAD} {self.layout}".split())
        return tuple((name, code) for name, code in pairs)

    @cached_property
    def little(self) -> struct.Struct:
        """The fixed part as binary frames carry it."""
        return struct.Struct("<" + "".join(code for _, code in self.fields))

    @cached_property
    def big(self) -> struct.Struct:
        """The fixed part as text twins carry it."""
        return struct.Struct(">" + "".join(code for _, code in self.fields))

    @cached_property
    def size(self) -> int:
        """Length of the fixed part [bytes]."""
        return self.little.size

    @cached_property
    def counted(self) -> bool:
        """True for the kinds that are handed over as arrays."""
        return self.frame is Tallies

    @cached_property
    def flags_at(self) -> int | None:
        """Offset of the flags byte in the payload [bytes], None where the kind has none."""
        names = [name for name, _ in self.fields]
        if "flags" not in names:
            return None
        return struct.calcsize("<" + "".join(code for _, code in self.fields[: names.index("flags")]))

    @cached_property
    def record(self) -> np.dtype[Any]:
        """The fixed part as a packed structured type, one element a payload."""
        return np.dtype([(name, _NUMPY_CODES.get(code, "S" + code[:-1])) for name, code in self.fields])

    def wire_bytes(self, text_bytes: int = 0) -> int:
        """Length of a binary frame on the wire [bytes]: payload, CRC, one byte of COBS, delimiter."""
        return self.size + text_bytes + 4

    def values(self, frame: Item) -> Iterable[tuple[Any, ...]]:
        """Values field by field, one tuple a frame on the wire; a text stands where its length goes."""
        if isinstance(frame, Tallies):
            columns = (frame.seq, frame.ms, frame.forward, frame.reflected, frame.flags)
            return ((self.number, *row) for row in zip(*(c.tolist() for c in columns), strict=True))
        names = ["text" if name == "length" else name for name, _ in self.fields[1:]]
        return [(self.number, *(getattr(frame, name) for name in names))]

    def read(self, payload: bytes) -> Item | None:
        """The frame in a little-endian payload, or None where its text is longer than the payload holds.

        The payload has at least `size` bytes; what lies beyond the known part is left alone.
        """
        values = dict(zip((n for n, _ in self.fields), self.little.unpack_from(payload), strict=True))
        del values["kind"]
        if self.text_limit:
            length = values.pop("length")
            if length > min(self.text_limit, len(payload) - self.size):
                return None
            values["text"] = payload[self.size : self.size + length].decode("utf-8", "replace")
        if "name" in values:
            values["name"] = values["name"].split(b"\0")[0].decode("utf-8", "replace")
        if self.wide:
            values["wide"] = True
        return self.frame(**values)


def kind_of(frame: Item) -> Kind | None:
    """The row of the table a frame belongs to; None for `Unknown`."""
    wide = getattr(frame, "wide", False)
    return next((k for k in KINDS if k.frame is type(frame) and k.wide == wide), None)


_NUMPY_CODES = {"B": "u1", "h": "<i2", "H": "<u2", "I": "<u4"}

_CREST = "forward_mean:{0} reflected_mean:{0} forward_crest:{0} reflected_at_crest:{0} conversions:H flags:B"

#: The table of kinds. A new kind is one line here.
KINDS: tuple[Kind, ...] = (
    Kind(0x11, "tally", Tallies, "forward:H reflected:H flags:B"),
    Kind(
        0x12,
        "nameplate",
        Nameplate,
        "minor:B boot:B device_id:I period_ms:H summed:H full_scale:I reference_mv:H features:B"
        " bridge_file_id:H firmware_version:H name:12s",
    ),
    Kind(0x13, "crest", Crest, _CREST.format("H")),
    Kind(0x14, "remark", Remark, "code:B argument:I length:B", text_limit=24),
    Kind(0x15, "wide tally", Tallies, "forward:I reflected:I flags:B", wide=True),
    Kind(0x16, "conditions", Conditions, "temperature_c100:h supply_mv:H frequency_hz:I"),
    Kind(0x17, "wide crest", Crest, _CREST.format("I"), wide=True),
)

KIND_BY_NUMBER: dict[int, Kind] = {kind.number: kind for kind in KINDS}
