"""What the tests of ports and links share."""

import os
import tty
from collections.abc import Iterator
from io import FileIO

import pytest


@pytest.fixture
def pty() -> Iterator[tuple[FileIO, str]]:
    """A pseudo terminal: its master, to write to and to close, and the path of the other end."""
    master, slave = os.openpty()
    tty.setraw(slave)
    path = os.ttyname(slave)
    os.close(slave)
    with open(master, "r+b", buffering=0) as held:
        yield held, path
