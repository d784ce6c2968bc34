"""Copies the firmware kit (C encoder, example, make file, its README) out of the package into a folder.

One rule: a builder's edits are never lost unasked. Where a file of the kit is already there and differs, nothing at
all is written unless forced.
"""

from __future__ import annotations

import contextlib
import os
from importlib.resources import files
from pathlib import Path

from bridgeio.errors import FileError

__all__ = ["KIT_FILES", "kit_text", "write_kit"]

#: The kit, in the order in which a builder reads it.
KIT_FILES = ("README.md", "board.h", "bridge.c", "bridgewire.h", "bridgewire.c", "Makefile")


def kit_text(name: str) -> bytes:
    """One file of the kit, byte by byte as it is shipped."""
    return files("bridgeio").joinpath("firmware", name).read_bytes()


def write_kit(folder: str | os.PathLike[str], force: bool = False) -> list[Path]:
    """Write the kit into `folder`, made if it is not there, and return the paths that were written.

    Files that are already as they should be are left alone. Raises FileError where files differ and `force` is
    not given, naming them all (then nothing was written), and where the folder cannot be written.
    """
    target = Path(folder)
    try:
        stale = [name for name in KIT_FILES if not _is_current(target / name)]
        changed = [name for name in stale if os.path.lexists(target / name)]
        if changed and not force:
            raise FileError(_refusal(target, changed))
        target.mkdir(parents=True, exist_ok=True)
        for name in stale:
            _write_whole(target / name, kit_text(name))
    except OSError as error:
        raise FileError(f"{target}: the firmware kit cannot be written there: {error.strerror or error}") from error
    return [target / name for name in stale]


def _is_current(path: Path) -> bool:
    try:
        return path.read_bytes() == kit_text(path.name)
    except FileNotFoundError:
        return False


def _refusal(target: Path, changed: list[str]) -> str:
    them = "that file" if len(changed) == 1 else "those files"
    return (
        f"{target}: {', '.join(changed)} there {'differs' if len(changed) == 1 else 'differ'} from the kit; nothing"
        f" was written. Give another folder, move {them} away, or overwrite with --force"
    )


def _write_whole(path: Path, content: bytes) -> None:
    """Old file or new file, never half of one; a link in the way is replaced, not followed."""
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        with part.open("xb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        part.replace(path)
    except OSError:
        with contextlib.suppress(OSError):
            part.unlink()
        raise
