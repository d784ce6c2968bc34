"""The circuit-simulated bench data in tests/data/shed, read once; what it holds is told in its README."""

import csv
from functools import cache
from pathlib import Path

import numpy as np

from bridgeio.bridge_file import BridgeFile, load_bridge_file
from calibration.fit import Fit, fit

FOLDER = Path(__file__).parent / "data" / "shed"


@cache
def sheet(bits: int) -> BridgeFile:
    """Bench sheet of the 12- or 16-bit converter."""
    return load_bridge_file(FOLDER / f"shed{bits}.bench.toml")


@cache
def fitted(bits: int) -> Fit:
    """The fit of that sheet."""
    found = sheet(bits)
    return fit(list(found.steps), name=found.name, full_scale=found.full_scale, ratings=found.ratings)


@cache
def table(name: str) -> dict[str, np.ndarray]:
    """Columns of a CSV file: numbers where all are, else text."""
    with open(FOLDER / f"{name}.csv", newline="") as file:
        rows = list(csv.DictReader(file))
    return {key: _column([row[key] for row in rows]) for key in rows[0]}


def _column(texts: list[str]) -> np.ndarray:
    try:
        return np.array([float(text) if text else np.nan for text in texts])
    except ValueError:
        return np.array(texts)
