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

__all__ = ["EXAMPLE", "add_arguments", "run"]

#: Residuals of this many times their expected variance are no noise.
_CONTRADICTING = 4.0
_CONTRADICT = (
    "the steps cannot be fitted: they contradict each other or leave too much open; wanted in every band power steps "
    "at different powers, each with counts of its own"
)

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

    # Read once: what is fitted and what is written are then the same steps, whoever edits the file meanwhile.
    text = sheet_text(args.file)
    sheet = parse_bridge_file(text, args.file, steps_only=True)
    say(visible(f"bridgewright fit: {len(sheet.steps)} steps of {sheet.name}; this takes some seconds"))
    found = _fitted(sheet)
    say("\n".join(visible(line) for line in _report(sheet, found)), sys.stdout)
    if args.output:
        table = FitTable.of_fit(found, datetime.now(UTC))
        write_fit(args.output, text, table)
        say(visible(f"written: {args.output}, fit id {table.id:04X}"), sys.stdout)
    else:
        say("nothing written; -o FILE writes the bridge file (it may name the same file)", sys.stdout)
    return 0


def _fitted(sheet: BridgeFile) -> Fit:
    """The fit of the sheet. SheetError also where its numbers run away, which steps that contradict each other do."""
    import numpy as np

    from calibration.errors import CalibrationError, SheetError
    from calibration.fit import fit

    try:
        with np.errstate(all="ignore"):
            found = fit(
                list(sheet.steps),
                name=sheet.name,
                full_scale=sheet.full_scale,
                z0_ohm=sheet.z0_ohm,
                detector=sheet.detector,
                ratings=sheet.ratings,
                match_return_loss_db=sheet.match_return_loss_db,
                device_id=sheet.device_id,
                diode=sheet.diode,
            )
    except CalibrationError:
        raise
    except (ValueError, np.linalg.LinAlgError) as error:
        raise SheetError(f"{_CONTRADICT} ({error})") from error
    if not all(np.isfinite(band.covariance).all() for band in found.bridge.bands):
        raise SheetError(_CONTRADICT)
    return found


def _report(sheet: BridgeFile, found: Fit) -> list[str]:
    bridge = found.bridge
    lines = [f"{bridge.name}: {len(sheet.steps)} steps, {len(bridge.bands)} bands", ""]
    for side, law in (("forward", bridge.forward_law), ("reflected", bridge.reflected_law)):
        lines.append(f"{side:9} detector: {law.words}")
    lines += ["", "   MHz    directivity   return loss as on a dummy   forward leak   SWR 1.5 reads within"]
    lines += [_band_line(band) for band in bridge.bands]
    lines += ["", f"wattmeter: scatter {100 * found.reference_scatter:.2f} % from step to step; its own accuracy of"]
    lines += [f"{bridge.reference_pct:g} % is in every power, and in no SWR"]
    worst = sorted(found.residuals, key=lambda r: -abs(r.sigmas))[:3]
    lines += [f"residuals: {found.chi_square_per_residual:.2f} per residual in units of expected variance; largest:"]
    lines += [f"  step {r.step + 1:3} {sheet.steps[r.step].kind:8} {r.what:9} {r.sigmas:+.1f} sd" for r in worst]
    if found.chi_square_per_residual > _CONTRADICTING:
        lines += ["caution: the steps contradict each other beyond their noise: look for a slip in those above first"]
    lines += [f"note: {note}" for note in found.notes]
    return lines


def _band_line(band: Band) -> str:
    import numpy as np

    from calibration.directivity import rho_interval
    from calibration.reflection import rho_from_swr, swr_from_rho
    from calibration.units import wave_db

    ratio = np.square(rho_from_swr(1.5))
    low, high = rho_interval(ratio, ratio, 0.0, band.directivity_limit, band.forward_leak_limit, band.angle_cosine)
    best, limit = -float(wave_db(max(band.directivity, 1e-6))), -float(wave_db(band.directivity_limit))
    swr = f"{float(swr_from_rho(low)):.2f}-{float(swr_from_rho(high)):.2f}"
    leak = -float(wave_db(band.forward_leak_limit))
    return (
        f"{band.frequency_hz / 1e6:7.3f}   {best:5.1f} dB      at least {limit:4.1f} dB{'':12} "
        f"at least {leak:4.1f} dB   {swr}"
    )
