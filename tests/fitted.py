"""The circuit-simulated bench sheets with their fit, as bridge files: fitted once a process."""

import tempfile
from datetime import UTC, datetime
from functools import cache
from pathlib import Path

from bridgeio.bridge_file import sheet_text
from bridgeio.fit_table import FitTable, write_fit
from tests import shed

SHEET = shed.FOLDER / "shed12.bench.toml"


@cache
def table(bits: int) -> FitTable:
    """The [fit] table of that sheet, dated to the day of the data."""
    return FitTable.of_fit(shed.fitted(bits), datetime(2026, 1, 31, 12, tzinfo=UTC), shed.sheet(bits).digest)


@cache
def bridge_text(bits: int) -> str:
    """The text of the bridge file, as `fit -o` writes it."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "shed.bridge.toml"
        write_fit(path, sheet_text(shed.FOLDER / f"shed{bits}.bench.toml"), table(bits))
        return path.read_text(encoding="utf-8")
