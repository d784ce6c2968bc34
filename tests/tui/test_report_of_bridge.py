"""`report` of a bridge file: words on standard output, or a page written whole."""

import pytest

from tests import fitted
from tui.__main__ import main


@pytest.fixture
def bridge(tmp_path):
    """The shed's bridge file, named by somebody who means ill."""
    path = tmp_path / "shed.bridge.toml"
    text = fitted.bridge_text(12).replace("garden shed bridge (12 bit)", "shed\\u001b[2J\\u202e<b>")
    path.write_text(text, encoding="utf-8")
    return path


def test_words_pass_the_door(bridge, capsys):
    """The report is told by content, and a name drives no terminal."""
    assert main(["report", str(bridge)]) == 0
    said = capsys.readouterr()
    assert "shed\\x1b[2J\\u202e<b>" in said.out
    assert "\x1b" not in said.out
    assert "DIRECTIVITY AND LEAKAGE" in said.out
    assert said.err == ""


def test_page_is_written_and_never_over_its_own_file(bridge, tmp_path, capsys):
    """--html writes one file that is said to be written; the bridge file itself is refused and stays as it was."""
    pytest.importorskip("matplotlib")
    before = bridge.read_bytes()
    assert main(["report", str(bridge), "--html", str(bridge)]) == 3
    assert "is the bridge file itself" in capsys.readouterr().err
    assert bridge.read_bytes() == before
    page = tmp_path / "shed.html"
    assert main(["report", str(bridge), "--html", str(page)]) == 0
    assert f"written: {page}" in capsys.readouterr().out
    text = page.read_text(encoding="utf-8")
    assert text.startswith("<!DOCTYPE html>")
    assert "<h1>shed\\x1b[2J\\u202e&lt;b&gt;</h1>" in text
    assert sorted(one.name for one in tmp_path.iterdir()) == ["shed.bridge.toml", "shed.html"]


def test_sheet_and_strangers_are_refused(tmp_path, capsys):
    """A bench sheet, another text and a missing file are faults with what was wanted."""
    other = tmp_path / "other.txt"
    other.write_text("hello", encoding="utf-8")
    for path, words in ((fitted.SHEET, "run `bridgewright fit"), (other, "wanted a bridge file"), ("no", "wanted")):
        assert main(["report", str(path)]) == 3
        assert words in capsys.readouterr().err
