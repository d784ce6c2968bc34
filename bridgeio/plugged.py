"""What is plugged in, where it is now, and why a serial port does not open, in words that say what to do.

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

__all__ = ["Port", "absent", "check_device", "find_again", "in_words", "list_ports", "lost_errors", "port_at"]

_NOT_THERE = (errno.ENOENT, errno.ENOTDIR, errno.ENXIO, errno.ENODEV)


@dataclass(frozen=True, slots=True)
class Port:
    """One serial port that is plugged in. Description and serial number are outside text.

    vid, pid and location are those of USB; the location ends in the interface (`1-2:1.0`) on some systems.
    """

    device: str
    description: str
    serial_number: str | None
    vid: int | None = None
    pid: int | None = None
    location: str | None = None


def list_ports() -> list[Port]:
    """Serial ports that are plugged in, those on USB first. A pty and links by id are never among them."""
    from serial.tools import list_ports as tools

    found = sorted(tools.comports(), key=lambda info: (info.vid is None, info.device))
    return [
        Port(
            info.device,
            _description(info.description),
            info.serial_number,
            info.vid,
            getattr(info, "pid", None),
            getattr(info, "location", None),
        )
        for info in found
    ]


def port_at(path: str, ports: list[Port] | None = None) -> Port | None:
    """The port that `path` leads to, also by a link; None for what is never listed, as a pty."""
    where = _place(path)
    listed = list_ports() if ports is None else ports
    return next((port for port in listed if where == _place(port.device)), None)


def find_again(path: str, was: Port | None) -> str | None:
    """Path of the device that was `was` (None: not known) when it stood at `path`; None while it is not there.

    Known by its serial number, else by the place it is plugged into, else by `path`; but what stands at `path` now and
    is known to be something else is left alone: opening a stranger's port may key a transmitter.
    """
    ports = list_ports()
    here = port_at(path, ports)
    same = [] if was is None else _same(ports, was)
    if was is not None and same:
        return max(same, key=lambda port: (port.location == was.location, _interface(port) == _interface(was))).device
    if here is None:
        return path if os.name == "posix" and os.path.exists(path) else None
    return path if was is None or _may_be(here, was) else None


def absent(error: BaseException | None) -> bool:
    """Whether an opening failed because there is nothing at the path."""
    return getattr(error, "errno", None) in _NOT_THERE


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
    if code in _NOT_THERE:
        return f"{path} is not there; {_plugged()}"
    return f"{path} does not open as a serial port: {error}"


def lost_errors() -> tuple[type[Exception], ...]:
    """Every way a lost port shows: SerialException and bare OSError, and termios.error, which is neither."""
    if sys.platform == "win32":
        return (OSError,)
    import termios

    return (OSError, termios.error)


def _place(path: str) -> str:
    return os.path.normcase(os.path.realpath(path))


def _same(ports: list[Port], was: Port) -> list[Port]:
    """Ports that are `was` for certain, or stand where it stood and are of its make; several where it has several."""
    alike = [port for port in ports if was.vid is not None and (port.vid, port.pid) == (was.vid, was.pid)]
    by_number = [port for port in alike if was.serial_number and port.serial_number == was.serial_number]
    return by_number or [port for port in alike if was.location and port.location == was.location]


def _may_be(here: Port, was: Port) -> bool:
    """Whether nothing speaks against it: of the same make, and no serial number that differs."""
    numbers = {here.serial_number, was.serial_number} - {None}
    return (here.vid, here.pid) == (was.vid, was.pid) and len(numbers) < 2


def _interface(port: Port) -> str:
    """Which of its ports it is, where one device has several."""
    return (port.location or "").partition(":")[2]


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
