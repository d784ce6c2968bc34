"""Whether a fit is of the steps beside it: a file whose steps were edited after the fit still reads, by the old fit.

One rule: only what follows from the steps without a new fit is compared; where nothing differs, that is no proof.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np

from calibration.bench import BenchStep
from calibration.bridge import band_at
from calibration.fit_model import group_bands
from calibration.reflection import rho_from_return_loss

from .fitted_file import FittedFile, known_power_w

__all__ = ["disagreements"]

#: kind of step -> what a fit compares in it.
_COMPARED = {
    "dark": ("forward", "reflected"),
    "power": ("power", "reflected"),
    "reversed": ("power",),
    "load": ("reflected",),
}
#: Nearer than this nothing of a known power can be told: the dummy's angle and the bridge's own loss are not in the
#: file (0.15 dB is 3.5 %).
_POWER_PART = 0.04


def disagreements(fitted: FittedFile) -> list[str]:
    """What in the steps of a file does not go with its fit, in sentences; empty where all goes together."""
    return [*_layout(fitted), *_means(fitted), *_powers(fitted)]


def _layout(fitted: FittedFile) -> Iterator[str]:
    """Steps that were added, taken out or are of another kind than the fit's residuals say."""
    expected = {(n, what) for n, step in enumerate(fitted.file.steps, 1) for what in _COMPARED[step.kind]}
    then = {(number, what) for number, what, _ in fitted.fit.residuals}
    off = sorted({number for number, _ in expected ^ then})
    if off:
        yield f"the fit is of other steps: they part at step {off[0]}"


def _means(fitted: FittedFile) -> Iterator[str]:
    """What the fit has taken over from the steps as it stands in them."""
    steps, bridge = fitted.file.steps, fitted.bridge
    hertz = group_bands(list(steps))
    if len(hertz) != len(bridge.bands) or not np.allclose(hertz, [band.frequency_hz for band in bridge.bands], 1e-6):
        yield "the steps are of other frequencies than the fit's bands"
    if not steps:
        return
    for what, now, then in (
        ("box temperature", np.mean([s.temperature_c for s in steps]), bridge.temperature_c),
        ("forward scatter", np.median([s.forward_sd for s in steps]), bridge.forward_sd),
        ("reflected scatter", np.median([s.reflected_sd for s in steps]), bridge.reflected_sd),
    ):
        if not np.isclose(now, then, rtol=1e-6, atol=1e-6):
            yield f"the {what} of the steps is {now:g}, the fit was made with {then:g}"


def _powers(fitted: FittedFile) -> Iterator[str]:
    """Known powers that are not where the fit's residuals have put them."""
    file, bridge = fitted.file, fitted.bridge
    scatter = fitted.fit.scatter_pct / 100.0
    dummy = float(rho_from_return_loss(file.ratings.dummy_return_loss_db))
    told = {number: sigmas for number, what, sigmas in fitted.fit.residuals if what == "power"}
    for number, step in enumerate(file.steps, 1):
        band = band_at(step.frequency_hz, bridge.bands) if step.frequency_hz else None
        # A residual of nothing at all is that of a step the fit has set aside.
        if not told.get(number) or band is None or step.kind not in ("power", "reversed"):
            continue
        ahead = step.kind == "power"
        law, counts = (bridge.forward_law, step.forward) if ahead else (bridge.reflected_law, step.reflected)
        gain = band.gain_forward if ahead else band.gain_reflected
        seen, watts = float(law.square(counts)) / gain**2, known_power_w(step, bridge.z0_ohm)
        noise = float(law.slope(counts)) * _count_sd(step, ahead) / gain**2 / seen if seen > 0.0 else math.inf
        room = _POWER_PART + 3.0 * band.forward_leak_limit * dummy + 3.0 * noise
        if seen > 0.0 and abs(math.log(seen / watts) - told[number] * scatter) > room + abs(told[number]) * noise:
            yield f"step {number}: its count and its power of {watts:g} W do not go together as they did in the fit"


def _count_sd(step: BenchStep, ahead: bool) -> float:
    return (step.forward_sd if ahead else step.reflected_sd) / math.sqrt(step.samples) + 1e-3 * (
        step.forward if ahead else step.reflected
    )
