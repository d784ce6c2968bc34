"""The fit of a bench into its own file, when the builder is content.

One rule: a fit stands beside the very steps it was made of, or it is not written.
"""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path

from bridgeio.bridge_file import parse_bridge_file, sheet_text
from bridgeio.errors import FileError
from bridgeio.fit_table import FitTable, write_fit

from .mind import Thought

__all__ = ["put_fit"]


def put_fit(path: Path, thought: Thought) -> str:
    """Write the fit that was thought of into the file; say what was done, or why it was not, in a sentence."""
    if thought.fit is None:
        return f"no fit can be written: {thought.trouble or 'the steps do not carry one yet'}"
    try:
        text = sheet_text(path)
        sheet = parse_bridge_file(text, str(path), steps_only=True)
        if sheet.steps != thought.steps:
            return (
                "not written: the steps in the file were edited meanwhile; quit, begin anew with the file, then write"
            )
        table = FitTable.of_fit(thought.fit, datetime.now(UTC), sheet.digest)
        write_fit(path, text, table)
    except FileError as error:
        return str(error)
    return f"written: {path}, fit id {table.id:04X}"
