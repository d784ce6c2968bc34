"""All that commands write, under hostile text in every place it may come from, is in the grammar of plain text."""

import re

import pytest

from bridgeio.framing import pack
from tests import fitted
from tests.terminal import HOSTILE, residue
from tests.tui.test_terminal_grammar import EVIL, frames, hostile_bridge
from tui.__main__ import main


@pytest.fixture(scope="module")
def place(tmp_path_factory):
    """A folder of a hostile name with a capture, a journal of it, a bridge file and a bench sheet, all hostile."""
    folder = tmp_path_factory.mktemp("outputs")
    bridge = hostile_bridge(folder, "".join(HOSTILE[::2])[:200])
    capture = bridge.with_name(f"{EVIL}.bin")
    wire = (pack(item) for number, text in enumerate(HOSTILE) for item in frames(4 * number, text, 20 * number))
    capture.write_bytes(b"".join(wire))
    sheet = bridge.with_name("sheet.toml")
    named = "".join(f"\\U{ord(char):08X}" for char in EVIL)
    sheet.write_text(
        fitted.SHEET.read_text(encoding="utf-8").replace("garden shed bridge (12 bit)", named), encoding="utf-8"
    )
    journal = bridge.with_name("log")
    assert main(["keep", f"file:{capture}", str(journal), "--bridge", str(bridge), "--frequency", "20m"]) == 0
    return bridge.parent


COMMANDS = {
    "stream": ["stream", "file:{at}/{evil}.bin", "--bridge", "{at}/bridge.toml", "--frequency", "20m"],
    "stream csv": ["stream", "file:{at}/{evil}.bin", "--format", "csv"],
    "watch plain": ["watch", "file:{at}/{evil}.bin", "--plain", "--bridge", "{at}/bridge.toml", "--rate", "1000"],
    "export": ["export", "{at}/log"],
    "export csv": ["export", "{at}/log", "--format", "csv"],
    "report": ["report", "{at}/log"],
    "report of a bridge": ["report", "{at}/bridge.toml"],
    "verify": ["verify", "{at}/bridge.toml", "--steps", "{at}/sheet.toml"],
    "fit": ["fit", "{at}/sheet.toml"],
    "keep": ["keep", "file:{at}/{evil}.bin", "{at}/other"],
    "a journal that is none": ["report", "{at}/{evil}.bin"],
    "a bridge file that is none": ["stream", "sim:", "--bridge", "{at}/log"],
}


@pytest.mark.parametrize("command", COMMANDS)
def test_no_command_lets_outside_text_drive_the_terminal(place, capsys, command):
    """Names of boards, bridges, files and folders, remarks and marks: no residue on either output."""
    code = main([word.format(at=place, evil=EVIL) for word in COMMANDS[command]])
    out, err = capsys.readouterr()
    assert code in (0, 3, 5)
    assert out or err
    assert residue(out.encode("utf-8", "surrogateescape")) == []
    assert residue(err.encode("utf-8", "surrogateescape")) == []


def test_report_page_holds_no_script_and_no_control(place, tmp_path):
    """The page of a bridge whose name is a script and worse: inert text, no control character."""
    bridge = hostile_bridge(tmp_path, "<script>alert(1)</script><img src=x onerror=y>\x1b[2J\u202e")
    page = tmp_path / "page.html"
    assert main(["report", str(bridge), "--html", str(page)]) == 0
    text = page.read_text(encoding="utf-8")
    assert not re.search(r"<script|<img src=x", text)
    assert "&lt;script&gt;" in text
    assert residue(text.encode()) == []


def test_rows_of_a_hostile_board_stay_rows(place, capsys):
    """The name of a bridge ends no line of CSV and begins no formula of a spreadsheet's."""
    main(["export", f"{place}/log", "--format", "csv"])
    lines = capsys.readouterr().out.splitlines()
    assert len(lines) == 1 + 2 * len(HOSTILE)
    assert not [cell for line in lines for cell in line.split(",") if re.match(r'"?[=@]', cell)]
