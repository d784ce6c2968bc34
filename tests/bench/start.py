"""How soon the program answers: `--version`, and the first picture of the screen."""

from __future__ import annotations

import sys

from .cost import Figure, Sizes, in_turn, median, run_once
from .programs import Screen, bridgewright

__all__ = ["measure"]


def measure(sizes: Sizes) -> list[Figure]:
    """CPU time of `--version` against `python -c pass`; wall time to the first picture against `import textual.app`."""
    version, nothing = in_turn(
        sizes.rounds * sizes.starts,
        lambda: run_once(bridgewright("--version")).cpu_s,
        lambda: run_once([sys.executable, "-c", "pass"]).cpu_s,
    )
    picture, imported = in_turn(
        sizes.rounds * sizes.starts,
        _first_picture_s,
        lambda: run_once([sys.executable, "-c", "import textual.app"]).wall_s,
    )
    return [
        _figure("version", "bridgewright --version, CPU", "python -c pass", version, nothing, 4.0),
        _figure(
            "first picture",
            "bridgewright watch sim:, to its picture, wall",
            "python -c 'import textual.app', wall",
            picture,
            imported,
            1.5,
        ),
    ]


def _first_picture_s() -> float:
    """Seconds from the start of the process until the last line of its first picture stands."""
    with Screen(bridgewright("watch", "sim:")) as screen:
        return screen.await_words("q quit") - screen.started_s


def _figure(name: str, what: str, default_name: str, ours: list[float], default: list[float], goal: float) -> Figure:
    mine, other = 1000.0 * median(ours), 1000.0 * median(default)
    return Figure(name, what, default_name, "ms", mine, other, mine / other, goal)
