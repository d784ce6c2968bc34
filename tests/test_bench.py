"""The measurement of speed runs through and says all it promises; its goals are judged by the full run alone."""

import json
import math
import sys

import pytest

if sys.platform != "linux":
    pytest.skip("processes are measured by Linux's clocks", allow_module_level=True)

from tests.bench.__main__ import PARTS, main, measure
from tests.bench.cost import Figure, Sizes
from tests.bench.eye import Eye

TINY = Sizes(
    rounds=1,
    chain_round_s=0.2,
    screen_lead_s=0.2,
    screen_round_s=0.4,
    latency_ticks=8,
    stream_s=0.2,
    frames=2000,
    lines=50,
    newton_samples=5,
    block=20_000,
    starts=1,
)
NAMES = [
    "receive", "receive 1 MB/s", "chain", "chain, lost", "journal", "journal, lost", "law", "block", "screen",
    "screen, ticks", "screen, output", "screen, fast", "latency", "latency, 95 %", "version", "first picture",
]  # fmt: skip
KEYS = [
    "name", "what", "default_name", "unit", "ours", "default", "value", "goal", "judged", "at_least", "more", "reached",
]  # fmt: skip


def test_bench_measures_everything_it_promises():
    """Every figure comes with its default, its goal and a verdict, as plain JSON and as a table; nothing is lost."""
    table = []
    found = json.loads(json.dumps(measure(TINY, tell=table.append), allow_nan=False))
    assert [figure["name"] for figure in found["figures"]] == NAMES
    for figure in found["figures"]:
        assert list(figure) == KEYS
        assert figure["ours"] is not None, figure
        assert figure["reached"] == _judge(figure)
    assert {"python", "cores", "load_before", "load_after"} <= set(found["machine"])
    assert found["sizes"]["rounds"] == 1
    lost = [figure["ours"] for figure in found["figures"] if figure["name"] in ("chain, lost", "journal, lost")]
    assert lost == [0.0, 0.0]
    assert all(any(line.startswith(name) for line in table) for name in NAMES)


def _judge(figure):
    if figure["value"] is None:
        return False
    return figure["value"] >= figure["goal"] if figure["at_least"] else figure["value"] <= figure["goal"]


def test_bench_what_cannot_be_measured_is_not_reached():
    """A figure without a value misses its goal, whichever way it is judged."""
    for at_least in (True, False):
        figure = Figure("x", "", "", "", 1.0, math.nan, math.nan, 2.0, at_least=at_least)
        assert not figure.reached


def test_bench_of_some_parts_writes_them(tmp_path, monkeypatch):
    """Parts can be asked for by name; the exit code says whether all goals are reached."""
    for value, code in ((3.0, 0), (1.0, 1)):
        made = Figure("law", "", "", "", value, 1.0, value, 2.0, at_least=True)
        monkeypatch.setitem(PARTS, "arithmetic", lambda sizes, made=made: [made])
        assert main(["--quick", "-o", str(tmp_path / "found.json"), "arithmetic"]) == code
        assert [figure["name"] for figure in json.loads((tmp_path / "found.json").read_text())["figures"]] == ["law"]
    with pytest.raises(SystemExit):
        main(["tea"])


def test_eye_reads_what_stands_on_the_terminal():
    """Moves, colours and titles leave the text; a sequence cut in two between reads does no harm."""
    eye = Eye(20, 3)
    for piece in (
        b"\x1b[?1049h\x1b]0;title\x07\x1b[2;3H\x1b[1",
        b";31mforward 50\x1b[0m W",
        b"\x1b[2;11H62\xe2",
        b"\x94\x80",
    ):
        eye.feed(piece)
    assert eye.row(1) == "  forward 62─W      "
    assert eye.find("62") == (10, 1)
    assert eye.feed(b"\x1b[1;1Hx\x1b[3;1Hy") == [0, 2]
