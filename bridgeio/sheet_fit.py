"""From the steps of a sheet to a fit, as command and screen do it alike.

One rule: numbers that run away, as those of steps that contradict each other do, are told in words and are no fit.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from calibration.errors import CalibrationError, SheetError

from .bridge_file import BridgeFile

if TYPE_CHECKING:
    from calibration.fit import Fit
    from calibration.next_step import Advice

__all__ = ["advice_of", "fit_of"]

_CONTRADICT = (
    "the steps cannot be fitted: they contradict each other or leave too much open; wanted in every band power steps "
    "at different powers, each with counts of its own"
)


def fit_of(sheet: BridgeFile) -> Fit:
    """The fit of the sheet's steps. SheetError where they cannot carry one, UnitError where a load cannot be read."""
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


def advice_of(sheet: BridgeFile, found: Fit | None = None, wanted_hz: tuple[float, ...] = ()) -> Advice:
    """What to measure next for the sheet; `found`: its fit where there is one, `wanted_hz`: bands wanted besides.

    UnitError where a load cannot be read, SheetError where the steps contradict each other.
    """
    from calibration.next_step import proposals

    fitted = None if found is None or found.model is None or found.solution is None else (found.model, found.solution)
    try:
        with np.errstate(all="ignore"):
            return proposals(
                list(sheet.steps),
                full_scale=sheet.full_scale,
                z0_ohm=sheet.z0_ohm,
                detector=sheet.detector,
                ratings=sheet.ratings,
                limits=sheet.limits,
                match_return_loss_db=sheet.match_return_loss_db,
                wanted_hz=wanted_hz,
                fitted=fitted,
            )
    except np.linalg.LinAlgError as error:
        raise SheetError(f"{_CONTRADICT} ({error})") from error
