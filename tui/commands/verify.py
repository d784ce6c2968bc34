"""`bridgewright verify`: known loads a bridge file was not fitted on, read by it and judged.

One rule: the verdict is on the stated intervals, not on the values; what was fitted on is never judged by.
"""

from __future__ import annotations

import argparse
import math
import sys
import textwrap
from collections.abc import Iterable, Iterator, Sequence
from typing import TYPE_CHECKING

from calibration.figures import interval, shown
from tui.door import say, visible

if TYPE_CHECKING:
    from bridgeio.bridge_file import BridgeFile
    from calibration.verdict import Held, Verdict

__all__ = ["EXAMPLE", "add_arguments", "run"]

EXAMPLE = "bridgewright verify shed.bridge.toml --steps second.bench.toml"

_WIDTH = 80
#: Exit code where the stated intervals are too narrow, as where there is nothing to judge by.
TOO_NARROW = 5
#: Intervals that all hold exclude a coverage below 90 % from this many loads up: 0.9^29 is below 5 %.
_ENOUGH = 29


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add verify's options."""
    parser.add_argument("file", metavar="FILE", help="bridge file with a fit")
    parser.add_argument(
        "--steps",
        required=True,
        metavar="FILE",
        help="bench sheet (TOML) with load and power steps measured afterwards, best with other parts; the exit code "
        "is 5 where the stated intervals are too narrow or nothing can be judged, else 0",
    )


def run(args: argparse.Namespace) -> int:
    """Read the steps by the bridge file, say how they lie, and give the verdict."""
    from bridgeio.bridge_file import load_bridge_file, parse_bridge_file, sheet_text
    from calibration.errors import SheetError
    from calibration.verdict import hear, verdict_on

    file = load_bridge_file(args.file)
    bridge = file.calibrated()
    steps = parse_bridge_file(sheet_text(args.steps), args.steps, steps_only=True)
    _demand_same_bridge(file, steps)
    heard = hear(bridge, steps.steps, steps.ratings, file.steps)
    _tell([f"{file.name}, fit {file.fit_id or 0:04X}, against {len(steps.steps)} steps of {args.steps}"])
    _tell(_left_out(heard.left_out))
    if not heard.loads and not heard.powers:
        raise SheetError(f"{args.steps}: holds no load or power step to judge by; wanted some that were not fitted on")
    too_narrow = False
    for held, of_power, table in ((heard.loads, False, _load_table), (heard.powers, True, _power_table)):
        if held:
            verdict = verdict_on(held, of_power=of_power)
            _tell(["", *table(held), "", *_in_words(verdict, "power" if of_power else "SWR")])
            too_narrow = too_narrow or verdict.word == "too narrow"
    return TOO_NARROW if too_narrow else 0


def _tell(lines: Iterable[str]) -> None:
    """Lines to standard output, whatever they hold; sentences are broken to fit a terminal, tables are not."""
    for line in lines:
        for part in textwrap.wrap(visible(line), _WIDTH, subsequent_indent="  ") if len(line) > _WIDTH else [line]:
            say(visible(part), sys.stdout)


def _demand_same_bridge(file: BridgeFile, steps: BridgeFile) -> None:
    """FileError where the steps cannot be this bridge's: their counts would mean something else."""
    from bridgeio.errors import FileError

    for what, own, other in (
        ("full_scale", file.full_scale, steps.full_scale),
        ("z0_ohm", file.z0_ohm, steps.z0_ohm),
        ("device_id", file.device_id, steps.device_id),
    ):
        if own != other and None not in (own, other):
            shown = [f"{value:08X}" if what == "device_id" else f"{value:g}" for value in (other or 0, own or 0)]
            raise FileError(
                f"{steps.source}: bridge.{what}: found {shown[0]}, but {file.source} has {shown[1]}; "
                "wanted steps of the same bridge"
            )


def _left_out(left: Sequence[tuple[int, str]]) -> list[str]:
    """Which steps are not judged, a line for each reason."""
    reasons: dict[str, list[int]] = {}
    for number, why in left:
        reasons.setdefault(why, []).append(number)
    return [f"left out, step {_ranges(numbers)}: {why}" for why, numbers in reasons.items()]


def _ranges(numbers: Sequence[int]) -> str:
    """Rising numbers as "1, 3-5"."""
    runs: list[list[int]] = []
    for number in numbers:
        if runs and number == runs[-1][1] + 1:
            runs[-1][1] = number
        else:
            runs.append([number, number])
    return ", ".join(str(first) if first == last else f"{first}-{last}" for first, last in runs)


def _load_table(held: Sequence[Held]) -> Iterator[str]:
    yield "step     MHz  load            SWR (own range)    reads  95 % interval"
    for one in held:
        step = one.step
        load = _ohms(step.load or "") + (f" {step.line_deg:g} deg" if step.line_deg else "")
        low, high, value = _swr(one.low), _swr(one.high), _swr(one.value)
        yield (
            f"{one.number:4} {(step.frequency_hz or 0.0) / 1e6:7.3f}  {load:14.14}  {_truth(one):17}  "
            f"{shown(value, low, high):>5}  {interval(low, high):15}  {_place(one)}"
        )


def _power_table(held: Sequence[Held]) -> Iterator[str]:
    yield "step     MHz  wattmeter (own range) W        reads  95 % interval W"
    for one in held:
        truth = f"{one.truth:.4g} ({one.truth_low:.4g}-{one.truth_high:.4g})"
        yield (
            f"{one.number:4} {(one.step.frequency_hz or 0.0) / 1e6:7.3f}  {truth:25}  "
            f"{shown(one.value, one.low, one.high):>9}  {interval(one.low, one.high):15}  {_place(one)}"
        )


def _ohms(load: str) -> str:
    """A load's text, its ohms to the digits that a column holds."""
    from calibration.loads import load_impedance_ohm

    ohm = load_impedance_ohm(load)
    return f"{ohm.real:.4g}{ohm.imag:+.3g}j" if ohm.imag else load


def _truth(one: Held) -> str:
    low, high = _swr(one.truth_low), _swr(one.truth_high)
    if math.isnan(high):
        return "above 1000" if math.isnan(low) else f"at least {low:.3g}"
    return f"{_swr(one.truth):.2f} ({low:.2f}-{high:.2f})"


def _swr(rho: float) -> float:
    """SWR, NaN for what is not known or has no end; beyond 1000 nobody asks."""
    return (1.0 + rho) / (1.0 - rho) if 0.0 <= rho < _OPEN_RHO else math.nan


def _place(one: Held) -> str:
    if one.strictly:
        return "inside"
    return "touches" if one.inside else "OUTSIDE"


def _in_words(verdict: Verdict, what: str) -> Iterator[str]:
    """The verdict, and the figures it rests on."""
    yield (
        f"{what}: {verdict.inside} of {verdict.count} inside ({verdict.strictly} without the references' own range); "
        f"this excludes coverage below {100.0 * verdict.excluded:.0f} %"
    )
    if verdict.positions:
        yield (
            f"where they lie: {verdict.outer} of {verdict.positions} in the outer part of the interval, where a "
            f"chance angle leaves half; median {verdict.median_position:.2f} of half its width (0.71 expected)"
        )
    yield f"{what} intervals: {_WORDS[verdict.word].format(chance=_chance(verdict), enough=_ENOUGH)}"


def _chance(verdict: Verdict) -> str:
    chance = verdict.chance if verdict.word == "too narrow" else verdict.outer_chance
    return f"{100.0 * chance:.2g} %" if chance > 1e-4 else "below 0.01 %"


#: From this reflection up SWR is beyond 1000.
_OPEN_RHO = 999.0 / 1001.0
#: verdict -> how it is said.
_WORDS = {
    "too narrow": "TOO NARROW; chance of so few inside 95 % intervals: {chance}. Look for a part or a setting that "
    "has changed since the fit, and fit anew with these steps too",
    "wider than needed": "they hold, and are wider than needed (chance of so few in the outer part: {chance}), as "
    "where the dummy load's bound rules; a better dummy load, or loads behind line, make them narrower",
    "about right": "about right: nothing speaks against them",
    "not told": "nothing speaks against them, but so few steps cannot tell: {enough}, all inside, would exclude "
    "coverage below 90 %",
}
