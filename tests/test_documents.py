"""The documents are held to the code: commands, blocks, names and dependencies in them are real."""

import re
import tomllib
from pathlib import Path

import pytest

from bridgeio.bridge_file import parse_bridge_file
from calibration.flags import FLAGS
from calibration.laws import LAWS
from tui.commands import COMMANDS

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
METHOD = (ROOT / "calibration/METHOD.md").read_text(encoding="utf-8")


def blocks(text, mark):
    """Contents of the fenced blocks of `text` that open with `mark`."""
    return re.findall(rf"^```{re.escape(mark)}\n(.*?)^```", text, re.M | re.S)


def test_readme_has_exactly_two_commands_of_one_line():
    """One line sets up and runs, one sets up and tests; `.ci/run` runs what stands there."""
    for mark in ("sh run", "sh test"):
        (block,) = blocks(README, mark)
        assert len(block.strip().splitlines()) == 1
        assert "venv" in block
    assert ".venv/bin/bridgewright" in blocks(README, "sh run")[0]
    assert "pytest" in blocks(README, "sh test")[0]


def test_readme_bench_sheet_is_valid():
    """The sheet to start from can be loaded as it stands, with a step of every kind."""
    (sheet,) = blocks(README, "toml")
    loaded = parse_bridge_file(sheet, "README")
    assert [step.kind for step in loaded.steps] == ["dark", "power", "reversed", "load"]
    assert loaded.detector in LAWS


def test_readme_names_only_commands_that_exist():
    """Every `bridgewright WORD` in the documents is a command, a source or an option."""
    for text in (README, DEVELOPERS, METHOD):
        for word in re.findall(r"(?<![/\w-])bridgewright ([a-z]+)\b(?!:)", text):
            assert word in COMMANDS or word in {"is", "turns", "stream"}, word


def test_top_level_holds_nothing_else():
    """The repository's top level is what a reader expects, besides dot files."""
    allowed = {"README.md", "DEVELOPERS.md", "LICENSE", "pyproject.toml", "bridgeio", "calibration", "tui", "tests"}
    # What a build or an installation may leave behind is ignored by git and here.
    left = {"build", "dist", "bridgewright.egg-info"}
    assert {path.name for path in ROOT.iterdir() if not path.name.startswith(".")} - left == allowed


def test_every_dependency_earns_its_place():
    """Each dependency and extra of pyproject stands in DEVELOPERS with its reason."""
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    wanted = [*project["dependencies"], *(one for extra in project["optional-dependencies"].values() for one in extra)]
    table = DEVELOPERS.split("## Why each dependency")[1]
    for requirement in wanted:
        assert re.split(r"[<>=\[]", requirement)[0] in table, requirement


def test_links_between_documents_lead_somewhere():
    """Every relative link in a document points at a file that is there."""
    for document in [
        *ROOT.glob("*.md"),
        *(path for floor in ("calibration", "bridgeio", "tui") for path in (ROOT / floor).rglob("*.md")),
    ]:
        for target in re.findall(r"\]\(([^)#:]+)(?:#[^)]*)?\)", document.read_text(encoding="utf-8")):
            assert (document.parent / target).exists(), (document, target)


@pytest.mark.parametrize("name", FLAGS)
def test_every_flag_is_explained_to_users(name):
    """The guide explains each flag in words."""
    assert name in (ROOT / "tui/GUIDE.md").read_text(encoding="utf-8")


def test_method_uses_the_codes_names():
    """Each name in METHOD's table of symbols is a name in the code of floor 0."""
    code = "\n".join(path.read_text(encoding="utf-8") for path in (ROOT / "calibration").rglob("*.py"))
    rows = METHOD.split("## Symbols")[1].split("##")[0]
    for row in re.findall(r"^\| (`.+?) \|", rows, re.M):
        for name in re.findall(r"`(\w+)`", row):
            assert re.search(rf"\b{name}\b", code), name
