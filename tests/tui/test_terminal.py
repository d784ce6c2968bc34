"""What a terminal can show, told by its environment."""

import pytest

from tui.terminal import Terminal, terminal


@pytest.mark.parametrize(
    ("environ", "encoding", "is_tty", "found"),
    [
        ({"TERM": "xterm-256color"}, "utf-8", True, Terminal(True, False, True)),
        ({"TERM": "xterm", "NO_COLOR": "1"}, "UTF-8", True, Terminal(True, False, False)),
        ({"TERM": "xterm", "NO_COLOR": ""}, "UTF-8", True, Terminal(True, False, True)),
        ({"TERM": "dumb"}, "utf-8", True, Terminal(False, False, False)),
        ({}, "utf-8", True, Terminal(False, False, False)),
        ({"TERM": "xterm"}, "ISO-8859-1", True, Terminal(True, True, True)),
        ({"TERM": "xterm"}, None, True, Terminal(True, True, True)),
        ({"TERM": "linux"}, "utf-8", True, Terminal(True, True, True)),
        ({"TERM": "vt100"}, "utf-8", True, Terminal(True, True, False)),
        ({"TERM": "xterm"}, "utf-8", False, Terminal(False, False, True)),
        ({"OS": "Windows_NT"}, "utf-8", True, Terminal(True, False, True)),
    ],
)
def test_terminal_is_judged_by_term_encoding_and_no_color(environ, encoding, is_tty, found):
    """Screen, alphabet and colour follow from the environment."""
    assert terminal(environ, encoding, is_tty) == found
