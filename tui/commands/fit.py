"""`bridgewright fit`: a bench sheet to a calibrated bridge file, with residuals and what stays open.

One rule: the steps are never altered; without -o nothing is written.
"""

from __future__ import annotations

import argparse
import sys
from typing import TYPE_CHECKING

from tui.door import say, visible

if TYPE_CHECKING:
    from bridgeio.bridge_file import BridgeFile
    from calibration.bridge import Band
    from calibration.fit import Fit
    from calibration.next_step import Advice

__all__ = ["EXAMPLE", "add_arguments", "run"]

#: Residuals of this many times their expected variance are no noise.
_CONTRADICTING = 4.0
#: Steps proposed.
_PROPOSALS = 3

EXAMPLE = "bridgewright fit shed.bench.toml -o shed.bridge.toml"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add fit's options."""
    parser.add_argument("file", metavar="FILE", help="bench sheet (TOML); a bridge file is fitted anew")
    parser.add_argument("-o", dest="output", metavar="FILE", help="write the bridge file here; may be the same file")


def run(args: argparse.Namespace) -> int:
    """Fit, report, and write where told."""
    from datetime import UTC, datetime

    from bridgeio.bridge_file import parse_bridge_file, sheet_text
    from bridgeio.fit_table import FitTable, write_fit
    from bridgeio.sheet_fit import advice_of, fit_of

    # Read once: what is fitted and what is written are then the same steps, whoever edits the file meanwhile.
    text = sheet_text(args.file)
    sheet = parse_bridge_file(text, args.file, steps_only=True)
    say(visible(f"bridgewright fit: {len(sheet.steps)} steps of {sheet.name}; this takes some seconds"))
    found = fit_of(sheet)
    say("\n".join(visible(line) for line in _report(sheet, found)), sys.stdout)
    say("\n".join(visible(line) for line in _next_lines(advice_of(sheet, found))), sys.stdout)
    if args.output:
        table = FitTable.of_fit(found, datetime.now(UTC), sheet.digest)
        write_fit(args.output, text, table)
        say(visible(f"written: {args.output}, fit id {table.id:04X}"), sys.stdout)
    else:
        say("nothing written; -o FILE writes the bridge file (it may name the same file)", sys.stdout)
    return 0


def _report(sheet: BridgeFile, found: Fit) -> list[str]:
    bridge = found.bridge
    lines = [f"{bridge.name}: {len(sheet.steps)} steps, {len(bridge.bands)} bands", ""]
    # The first notes are those of the slips.
    slips, notes = found.notes[: len(found.slips)], found.notes[len(found.slips) :]
    lines += _wrapped("slip: ", slips)
    for side, law in (("forward", bridge.forward_law), ("reflected", bridge.reflected_law)):
        lines.append(f"{side:9} detector: {law.words}")
    lines += ["", "           directivity   bound, as     forward leak   SWR 1.5"]
    lines += ["    MHz    best value    return loss   bound          reads within"]
    lines += [_band_line(band) for band in bridge.bands]
    lines += _load_lines(found)
    lines += ["", *_wrapped("cross-check: ", found.checks)] if found.checks else []
    lines += ["", f"wattmeter: scatter {100 * found.reference_scatter:.2f} % from step to step; its own accuracy of"]
    lines += [f"{bridge.reference_pct:g} % is in every power, and in no SWR"]
    aside = {step for slip in found.slips for step in slip.steps}
    used = [residual for residual in found.residuals if residual.step not in aside]
    worst = sorted(used, key=lambda r: -abs(r.sigmas))[:3]
    lines += [f"residuals: {found.chi_square_per_residual:.2f} per residual in units of expected variance; largest:"]
    lines += [f"  step {r.step + 1:3} {sheet.steps[r.step].kind:8} {r.what:9} {r.sigmas:+.1f} sd" for r in worst]
    if found.chi_square_per_residual > _CONTRADICTING:
        lines += [
            "caution: the steps contradict each other beyond their noise: look for a slip",
            "in those above first",
        ]
    return lines + _wrapped("note: ", notes)


def _load_lines(found: Fit) -> list[str]:
    if not found.loads:
        return []
    lines = ["", "load, ohm   found error   of tolerance   inductance   capacitance"]
    return lines + [
        f"{load.text:>9}   {load.error_pct:+5.2f} +-{load.error_sd_pct:4.2f} %  {load.tolerance_pct:7g} %   "
        f"{load.nh:9.1f} nH   {load.pf:8.1f} pF"
        for load in found.loads
    ]


def _next_lines(advice: Advice) -> list[str]:
    """What to measure next, the best few."""
    best = tuple(proposal.words for proposal in advice.proposals[:_PROPOSALS])
    if not best:
        return ["", *_wrapped("", advice.lead), "nothing more that would narrow these intervals by a hundredth"]
    return ["", *_wrapped("", advice.lead), "to measure next:", *_wrapped("- ", best)]


def _wrapped(label: str, sentences: tuple[str, ...]) -> list[str]:
    """Each sentence in lines of at most 79 columns, the first after `label`."""
    import textwrap

    return [line for said in sentences for line in textwrap.wrap(label + said, 79, subsequent_indent="  ")]


def _band_line(band: Band) -> str:
    from calibration.fit_notes import swr_span
    from calibration.units import wave_db

    best, limit = -float(wave_db(max(band.directivity, 1e-6))), -float(wave_db(band.directivity_limit))
    leak = -float(wave_db(band.forward_leak_limit))
    bounds = f"{best:5.1f} dB      {limit:5.1f} dB      {leak:5.1f} dB"
    return f"{band.frequency_hz / 1e6:7.3f}     {bounds}       {swr_span(band)}"
