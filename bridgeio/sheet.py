"""Bench sheets as text: what the program writes when the steps come from itself and not from a hand.

One rule: a sheet is meant to be read and edited by people, so it carries its comments, and only what was told.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import fields

from calibration.bench import BenchRatings, BenchStep

from .fit_table import toml_text

__all__ = ["sheet_of"]

_DEFAULTS = {field.name: field.default for field in fields(BenchStep)}
#: Written even where they equal the default, so that nobody has to look a default up.
_ALWAYS = frozenset({"forward_sd", "reflected_sd", "samples", "temperature_c"})


def sheet_of(
    *,
    name: str,
    full_scale: int,
    diode: str | None,
    ratings: BenchRatings,
    steps: Sequence[BenchStep],
    comment: str,
    device_id: int | None = None,
) -> str:
    """TOML text of a bench sheet for a bridge with diode detectors; `comment` is its first line, or lines."""
    lines = [f"# {line}" for line in comment.splitlines()]
    lines += ["schema = 1", "", "[bridge]", f"name = {toml_text(name)}"]
    lines += [f"full_scale = {full_scale}     # the largest count a tally can hold", "z0_ohm = 50.0"]
    lines += ['detector = "diode"', *([f'diode = "{diode}"'] if diode else [])]
    lines += [] if device_id is None else [f'device_id = "{device_id:08X}"']
    lines += ["", "[bench]", f"reference_pct = {ratings.reference_pct}    # accuracy of the reference wattmeter, 95 %"]
    if ratings.reference_full_scale_w is not None:
        lines += [f"reference_full_scale_w = {ratings.reference_full_scale_w}    # that percentage is of this"]
    lines += [f"dummy_return_loss_db = {ratings.dummy_return_loss_db}    # the dummy load's worst case"]
    lines += [f"resistor_pct = {ratings.resistor_pct}    # tolerance of the known loads"]
    for step in steps:
        lines += ["", "[[step]]", *_step_lines(step)]
    return "\n".join(lines) + "\n"


def _step_lines(step: BenchStep) -> list[str]:
    told = {field.name: getattr(step, field.name) for field in fields(BenchStep)}
    order = [key for key in told if key not in ("forward", "reflected")]
    order[order.index("forward_sd") : order.index("forward_sd")] = ["forward"]
    order[order.index("reflected_sd") : order.index("reflected_sd")] = ["reflected"]
    return [
        f"{key} = {_value(told[key])}" for key in order if key in _ALWAYS or told[key] != _DEFAULTS.get(key, object())
    ]


def _value(value: object) -> str:
    if isinstance(value, str):
        return toml_text(value)
    if isinstance(value, float) and value.is_integer() and 1e5 <= abs(value) < 1e15:
        return f"{int(value):_}"
    # numpy's numbers are floats too, but write themselves as np.float64(1.0).
    return repr(float(value)) if isinstance(value, float) else str(value)
