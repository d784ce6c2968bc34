"""What is plugged in, and why a serial port does not open, in words that say what to do.

One rule: nothing is opened here; a message names the device, what stands in the way, and the next step.
"""

from __future__ import annotations

import errno
import os
import stat
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from bridgeio.errors import LinkError

__all__ = ["Port", "check_device", "in_words", "list_ports", "lost_errors"]


@dataclass(frozen=True, slots=True)
class Port:
    """One serial port that is plugged in. Description and serial number are outside text."""

    device: str
    description: str
    serial_number: str | None


def list_ports() -> list[Port]:
    """Serial ports that are plugged in, those on USB first. A pty and links by id are never among them."""
    from serial.tools import list_ports as tools

    found = sorted(tools.comports(), key=lambda info: (info.vid is None, info.device))
    return [Port(info.device, _description(info.description), info.serial_number) for info in found]


def check_device(path: str) -> None:
    """LinkError in words for what can never be a port. On Windows a name is no path and passes unseen."""
    if os.name != "posix":
        return
    try:
        mode = os.stat(path).st_mode
    except OSError as error:
        raise LinkError(in_words(path, error)) from error
    if stat.S_ISDIR(mode):
        raise LinkError(f"{path} is a folder, not a serial port; {_plugged()}")
    if stat.S_ISREG(mode) or stat.S_ISFIFO(mode):
        raise LinkError(f"{path} is a file, not a serial port; did you mean file:{path}?")
    if not stat.S_ISCHR(mode):
        raise LinkError(f"{path} is not a serial port; {_plugged()}")


def in_words(path: str, error: Exception) -> str:
    """Why the port at `path` did not open with `error`, and what to do."""
    code = getattr(error, "errno", None)
    if code in (errno.EACCES, errno.EPERM):
        return f"{path} may not be opened by you{_remedy(path)}"
    if code in (errno.EBUSY, errno.EAGAIN):
        return f"{path} is busy: {_holder(path)} holds it; close that first"
    if code in (errno.ENOENT, errno.ENOTDIR, errno.ENXIO, errno.ENODEV):
        return f"{path} is not there; {_plugged()}"
    return f"{path} does not open as a serial port: {error}"


def lost_errors() -> tuple[type[Exception], ...]:
    """Every way a lost port shows: SerialException and bare OSError, and termios.error, which is neither."""
    if sys.platform == "win32":
        return (OSError,)
    import termios

    return (OSError, termios.error)


def _remedy(path: str) -> str:
    """Name the device's group and the command that lets the user in."""
    if sys.platform == "win32":
        return ""
    import grp
    import pwd

    try:
        status = os.stat(path)
        group = grp.getgrgid(status.st_gid).gr_name
        user = pwd.getpwuid(os.getuid()).pw_name
    except (OSError, KeyError):
        return ": ask for read and write access to it"
    if status.st_gid == 0 or status.st_mode & 0o060 != 0o060:
        return f": its group is {group}, which does not help; a udev rule can give it a group of its own"
    return f": it belongs to the group {group}; run `sudo usermod -aG {group} {user}`, then log out and in again"


def _holder(path: str) -> str:
    """Words for the program that holds the port; found only among processes that we may look at."""
    wanted = os.path.realpath(path)
    for process, link in _open_files():
        if link == wanted:
            return "this program itself" if process == os.getpid() else f"{_name(process)} (pid {process})"
    return "another program"


def _open_files() -> Iterator[tuple[int, str]]:
    """Process id and path of every open file we may see; what goes away while we look is passed over."""
    for descriptor in Path("/proc").glob("[0-9]*/fd/*"):
        try:
            yield int(descriptor.parts[2]), os.readlink(descriptor)
        except OSError:
            continue


def _name(process: int) -> str:
    try:
        return Path(f"/proc/{process}/comm").read_text(errors="replace").strip()
    except OSError:
        return "a program"


def _plugged() -> str:
    ports = [port.device for port in list_ports()]
    return f"plugged in: {', '.join(ports)}" if ports else "no serial port is plugged in"


def _description(text: str | None) -> str:
    return "" if text in (None, "n/a") else str(text)
