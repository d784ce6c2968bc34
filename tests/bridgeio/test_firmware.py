"""The firmware kit on the host: the C encoder against the reference encoder, and copying the kit out."""

from __future__ import annotations

import ctypes
import functools
import random
import re
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from bridgeio.codes import REMARK_CODES
from bridgeio.errors import FileError
from bridgeio.firmware_kit import KIT_FILES, kit_text, write_kit
from bridgeio.frames import FLAG_DROPPED, KINDS, Conditions, Crest, Item, Nameplate, Remark, Tallies
from bridgeio.framing import pack
from tests.mcu.board import KIT, needs_gcc, run_tool, workshop
from tui.__main__ import main

HOST_FLAGS = ("-std=c99", "-Wall", "-Wextra", "-Wpedantic", "-Wconversion", "-Werror")
FRAMES = 10_000
GUARD = b"\xa5" * 64
#: Bytes of UTF-8 a field may hold.
TEXT_LIMITS = {"name": 12, "text": 24}


class Line(ctypes.Structure):
    _fields_ = [("seq", ctypes.c_uint8), ("owed", ctypes.c_uint8)]


class CTally(ctypes.Structure):
    _fields_ = [("forward", ctypes.c_uint16), ("reflected", ctypes.c_uint16), ("flags", ctypes.c_uint8)]


class CCrest(ctypes.Structure):
    _fields_ = [
        *((n, ctypes.c_uint16) for n in ("forward_mean", "reflected_mean", "forward_crest", "reflected_at_crest")),
        ("conversions", ctypes.c_uint16),
        ("flags", ctypes.c_uint8),
    ]


class CRemark(ctypes.Structure):
    _fields_ = [("code", ctypes.c_uint8), ("argument", ctypes.c_uint32), ("text", ctypes.c_char_p)]


class CConditions(ctypes.Structure):
    _fields_ = [
        ("temperature_c100", ctypes.c_int16),
        ("supply_mv", ctypes.c_uint16),
        ("frequency_hz", ctypes.c_uint32),
    ]


class CWideTally(ctypes.Structure):
    _fields_ = [("forward", ctypes.c_uint32), ("reflected", ctypes.c_uint32), ("flags", ctypes.c_uint8)]


class CWideCrest(ctypes.Structure):
    _fields_ = [
        *((n, ctypes.c_uint32) for n in ("forward_mean", "reflected_mean", "forward_crest", "reflected_at_crest")),
        ("conversions", ctypes.c_uint16),
        ("flags", ctypes.c_uint8),
    ]


class CNameplate(ctypes.Structure):
    _fields_ = [
        ("minor", ctypes.c_uint8),
        ("boot", ctypes.c_uint8),
        ("device_id", ctypes.c_uint32),
        ("period_ms", ctypes.c_uint16),
        ("summed", ctypes.c_uint16),
        ("full_scale", ctypes.c_uint32),
        ("reference_mv", ctypes.c_uint16),
        ("features", ctypes.c_uint8),
        ("bridge_file_id", ctypes.c_uint16),
        ("firmware_version", ctypes.c_uint16),
        ("name", ctypes.c_char * 12),
    ]


@dataclass(frozen=True)
class Encoder:
    """One function of the kit: its kind, its C struct, and the frame the reference encoder is given."""

    kind: str
    struct: Any
    frame: Callable[..., Item]


#: A further kind in the kit is one line here.
ENCODERS = (
    Encoder("tally", CTally, Tallies.of),
    Encoder("nameplate", CNameplate, Nameplate),
    Encoder("crest", CCrest, Crest),
    Encoder("remark", CRemark, Remark),
    Encoder("wide_tally", CWideTally, functools.partial(Tallies.of, wide=True)),
    Encoder("conditions", CConditions, Conditions),
    Encoder("wide_crest", CWideCrest, functools.partial(Crest, wide=True)),
)


@functools.cache
def encoder() -> ctypes.CDLL:
    """The encoder as a shared library for the host, built without a warning."""
    out = workshop() / "bridgewire.so"
    run_tool("gcc", *HOST_FLAGS, "-O1", "-shared", "-fPIC", KIT / "bridgewire.c", "-o", out)
    library = ctypes.CDLL(str(out))
    for one in ENCODERS:
        function = getattr(library, f"bw_put_{one.kind}")
        function.restype = ctypes.c_uint8
        function.argtypes = [ctypes.POINTER(Line), ctypes.c_char_p, ctypes.c_uint32, ctypes.POINTER(one.struct)]
    return library


def put(kind: str, line: Line, ms: int, fields: Any) -> bytes:
    """The frame the C encoder makes; a byte written beyond its length fails."""
    room = ctypes.create_string_buffer(GUARD, len(GUARD))
    length = getattr(encoder(), f"bw_put_{kind}")(ctypes.byref(line), room, ms, ctypes.byref(fields))
    assert room.raw[length:] == GUARD[length:]
    return room.raw[:length]


def any_number(dice: random.Random, bits: int) -> int:
    """Often an edge, often with zero bytes inside, else anything."""
    number = dice.choice((0, 1, (1 << bits) - 1, dice.getrandbits(bits), dice.getrandbits(bits)))
    return number & dice.choice((0xFFFFFFFF, 0xFF00FF00, 0x00FF00FF, 0xFFFFFFFF))


def any_text(dice: random.Random, limit: int) -> bytes:
    """Up to `limit` bytes of UTF-8."""
    text = "".join(dice.choices("aZ0 -ü€", k=dice.randint(0, limit)))
    return text.encode()[:limit].decode(errors="ignore").encode()


def any_fields(dice: random.Random, struct: Any) -> dict[str, Any]:
    """Values for every field of a C struct."""
    return {
        name: any_text(dice, TEXT_LIMITS[name])
        if name in TEXT_LIMITS
        else kind(any_number(dice, 8 * ctypes.sizeof(kind))).value
        for name, kind in struct._fields_
    }


@needs_gcc
@pytest.mark.parametrize("one", ENCODERS, ids=lambda one: one.kind)
def test_encoder_makes_the_reference_bytes_for_random_frames(one: Encoder) -> None:
    """The C encoder and the reference encoder agree byte by byte over 10 000 random frames of a kind."""
    dice = random.Random(f"{one.kind} 1")
    line = Line()
    for number in range(FRAMES):
        fields, ms = any_fields(dice, one.struct), any_number(dice, 32)
        made = put(one.kind, line, ms, one.struct(**fields))
        told = {name: value.decode() if name in TEXT_LIMITS else value for name, value in fields.items()}
        assert made == pack(one.frame(seq=number % 256, ms=ms, **told)), (fields, ms)


@needs_gcc
@pytest.mark.parametrize("one", [e for e in ENCODERS if "flags" in dict(e.struct._fields_)], ids=lambda one: one.kind)
def test_encoder_says_once_that_frames_were_dropped(one: Encoder) -> None:
    """After bw_note_dropped the next frame of counts carries the flag besides its own, a nameplate before it not."""
    line, fields = Line(), {name: 3 for name, _ in one.struct._fields_}
    encoder().bw_note_dropped(ctypes.byref(line))
    assert put("nameplate", line, 5, CNameplate()) == pack(Nameplate(0, 5, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, ""))
    first, second = put(one.kind, line, 6, one.struct(**fields)), put(one.kind, line, 7, one.struct(**fields))
    assert first == pack(one.frame(seq=1, ms=6, **{**fields, "flags": FLAG_DROPPED | 3}))
    assert second == pack(one.frame(seq=2, ms=7, **fields))


@needs_gcc
def test_remark_without_text_or_with_too_long_a_one() -> None:
    """No text at all is an empty one; of a text that is too long the first 24 bytes go out."""
    line, text = Line(), "the relay on the roof does not answer"
    assert put("remark", line, 5, CRemark(0x80, 7, None)) == pack(Remark(0, 5, 0x80, 7, ""))
    assert put("remark", line, 6, CRemark(0x80, 7, text.encode())) == pack(Remark(1, 6, 0x80, 7, text[:24]))


@needs_gcc
def test_encoder_needs_nothing_from_any_library() -> None:
    """The object has no undefined symbol: no heap, no stdio, no floating point, not even memcpy."""
    out = workshop() / "bridgewire.o"
    run_tool("gcc", *HOST_FLAGS, "-Os", "-fno-pie", "-c", KIT / "bridgewire.c", "-o", out)
    assert run_tool("nm", "-u", out).split() == []


def test_header_tells_the_lengths_of_the_wire() -> None:
    """BW_..._BYTES in the header are the wire bytes in the table of kinds."""
    header = kit_text("bridgewire.h").decode()
    told = dict(re.findall(r"#define BW_(\w+)_BYTES (\d+)", header))
    lengths = {kind.name.replace(" ", "_").upper(): kind.wire_bytes(kind.text_limit) for kind in KINDS}
    assert {name: int(told[name]) for name in lengths} == lengths
    assert max(lengths.values()) == lengths[re.findall(r"BW_LONGEST_BYTES BW_(\w+)_BYTES", header)[0]]


def test_kit_packs_every_kind_of_the_wire() -> None:
    """No kind in the table is without its function in the header."""
    functions = re.findall(r"^uint8_t bw_put_(\w+)\(", kit_text("bridgewire.h").decode(), re.MULTILINE)
    assert sorted(functions) == sorted(kind.name.replace(" ", "_") for kind in KINDS)
    assert sorted(functions) == sorted(one.kind for one in ENCODERS)


def test_header_tells_the_remark_codes_of_the_wire() -> None:
    """The codes in the header are those of the table, each once."""
    told = re.findall(r"#define BW_REMARK_\w+ (0x\w+)", kit_text("bridgewire.h").decode())
    assert [int(number, 16) for number in told] == list(REMARK_CODES)


def test_kit_lists_every_file_of_its_folder() -> None:
    """What lies in the firmware folder is what is copied out."""
    assert sorted(KIT_FILES) == sorted(path.name for path in KIT.iterdir())


def test_write_kit_into_a_new_folder(tmp_path: Path) -> None:
    """The folder is made and holds the kit byte by byte, and nothing else."""
    written = write_kit(tmp_path / "a" / "b")
    assert {path.name: path.read_bytes() for path in (tmp_path / "a" / "b").iterdir()} == {
        path.name: kit_text(path.name) for path in written
    }
    assert [path.name for path in written] == list(KIT_FILES)


def test_write_kit_again_writes_nothing(tmp_path: Path) -> None:
    """Files that are already as in the kit are left alone."""
    write_kit(tmp_path)
    assert write_kit(tmp_path) == []


def test_write_kit_over_edited_files_is_refused(tmp_path: Path) -> None:
    """Both edited files are named, they stay, and no missing file is written either."""
    for name in ("board.h", "bridge.c"):
        (tmp_path / name).write_text("mine")
    with pytest.raises(FileError, match=r"board\.h, bridge\.c there differ from the kit; nothing was written.*--force"):
        write_kit(tmp_path)
    assert sorted(path.name for path in tmp_path.iterdir()) == ["board.h", "bridge.c"]
    assert (tmp_path / "board.h").read_text() == "mine"


def test_write_kit_with_force_overwrites(tmp_path: Path) -> None:
    """With force the edited file becomes the kit's; a link is replaced, its target stays."""
    outside = tmp_path / "outside"
    outside.write_text("mine")
    folder = tmp_path / "kit"
    folder.mkdir()
    (folder / "board.h").symlink_to(outside)
    write_kit(folder, force=True)
    assert (folder / "board.h").read_bytes() == kit_text("board.h")
    assert (outside.read_text(), (folder / "board.h").is_symlink()) == ("mine", False)


def test_write_kit_over_a_dangling_link_is_refused(tmp_path: Path) -> None:
    """A link that points nowhere is somebody's all the same."""
    (tmp_path / "board.h").symlink_to(tmp_path / "nowhere")
    with pytest.raises(FileError, match=r"board\.h there differs"):
        write_kit(tmp_path)


def test_write_kit_where_a_file_is_in_the_way(tmp_path: Path) -> None:
    """A file in place of the folder is an error in words."""
    (tmp_path / "kit").write_text("")
    with pytest.raises(FileError, match="cannot be written there: Not a directory"):
        write_kit(tmp_path / "kit")


def test_command_writes_the_kit_and_tells_the_paths(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """`bridgewright firmware DIR` leaves with 0 and prints a path a line on standard output."""
    assert main(["firmware", str(tmp_path)]) == 0
    assert capsys.readouterr().out.splitlines() == [str(tmp_path / name) for name in KIT_FILES]


def test_command_refuses_edited_files_with_words(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """An edited file means exit code 3 and a sentence that names it; --force means 0."""
    (tmp_path / "board.h").write_text("mine")
    assert main(["firmware", str(tmp_path)]) == 3
    assert "board.h there differs from the kit" in capsys.readouterr().err
    assert main(["firmware", str(tmp_path), "--force"]) == 0
