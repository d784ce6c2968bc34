"""`python -m tests.bench [--quick] [-o FILE]`: all that is promised about speed, measured side by side in one run.

One rule: a figure is a ratio to a named default that was measured in turn with it on the same machine; absolute
figures stand beside it. Run it from the repository's root, on Linux.
"""

from __future__ import annotations

import argparse
import json
import os
import platform
import sys
from collections.abc import Callable, Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any

from . import arithmetic, chain, journal, latency, screen, start, wire
from .cost import QUICK, Figure, Sizes, loads

__all__ = ["PARTS", "main", "measure"]

#: part -> what measures it, in the order of the table.
PARTS: dict[str, Callable[[Sizes], list[Figure]]] = {
    "wire": wire.measure,
    "chain": chain.measure,
    "journal": journal.measure,
    "arithmetic": arithmetic.measure,
    "screen": screen.measure,
    "latency": latency.measure,
    "start": start.measure,
}


def main(argv: Sequence[str] | None = None) -> int:
    """Measure, print the table, write the JSON; 1 where a goal is missed."""
    parser = argparse.ArgumentParser(prog="python -m tests.bench", description="Measures speed as ratios, in one run.")
    parser.add_argument("--quick", action="store_true", help="a first look: seconds where the full run takes minutes")
    parser.add_argument("-o", metavar="FILE", type=Path, help="write the figures as JSON")
    parser.add_argument("parts", nargs="*", metavar="PART", help=f"only these of {', '.join(PARTS)}")
    args = parser.parse_args(argv)
    if unknown := set(args.parts) - set(PARTS):
        parser.error(f"no such part: {', '.join(sorted(unknown))}; known: {', '.join(PARTS)}")
    found = measure(QUICK if args.quick else Sizes(), args.parts or list(PARTS), tell=sys.stdout.write)
    if args.o is not None:
        args.o.write_text(json.dumps(found, indent=2) + "\n", encoding="utf-8")
    return 0 if all(figure["reached"] for figure in found["figures"]) else 1


def measure(
    sizes: Sizes, parts: Sequence[str] = tuple(PARTS), tell: Callable[[str], Any] = lambda text: None
) -> dict[str, Any]:
    """Figures of `parts` as plain data for JSON, where NaN is None; each line of the table is told as it comes."""
    before = loads()
    tell(_head())
    figures = []
    for part in parts:
        for figure in PARTS[part](sizes):
            tell(_line(figure))
            figures.append(_plain(asdict(figure)) | {"reached": figure.reached})
    after = loads()
    tell(f"load average before {before}, after {after}, on {os.cpu_count()} cores\n")
    machine = {"python": platform.python_version(), "machine": platform.machine(), "cores": os.cpu_count()}
    return {
        "machine": machine | {"load_before": before, "load_after": after},
        "sizes": asdict(sizes),
        "figures": figures,
    }


def _head() -> str:
    return f"{'':15} {'ours':>12} {'default':>12}  {'unit':24} {'judged':>16}  {'goal':>10}\n"


def _line(figure: Figure) -> str:
    sign = ">=" if figure.at_least else "<="
    judged = f"{_number(figure.value)} {'' if figure.judged == 'ratio' else figure.judged}"
    mark = "reached" if figure.reached else "MISSED"
    first = (
        f"{figure.name:15} {_number(figure.ours):>12} {_number(figure.default):>12}  {figure.unit:24} {judged:>16}  "
        f"{sign + ' ' + _number(figure.goal):>10}  {mark}\n"
    )
    second = f"    {figure.what}; default: {figure.default_name}\n"
    more = "; ".join(f"{name}: {_number(value)}" for name, value in figure.more.items())
    return first + second + (f"    {more}\n" if more else "")


def _number(value: float) -> str:
    return "-" if value != value else f"{value:,.0f}" if abs(value) >= 1000.0 else f"{value:.3g}"


def _plain(value: Any) -> Any:
    """The same with None for what JSON cannot say."""
    if isinstance(value, dict):
        return {key: _plain(inner) for key, inner in value.items()}
    return None if isinstance(value, float) and (value != value or abs(value) == float("inf")) else value


if __name__ == "__main__":
    sys.exit(main())
