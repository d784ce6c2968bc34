"""Pictures of a bridge file: the laws with their points, leakage and coupling a band, intervals, residuals.

One rule: no word from outside is drawn, so nothing in a picture needs to be escaped; colours only repeat what a label
says (hues: M. Okabe and K. Ito, Color Universal Design, 2008, values from memory). matplotlib is imported inside
functions: it is an extra, and costs half a second.
"""

from __future__ import annotations

import io
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from calibration.bench import step_power_w
from calibration.bridge import band_at
from calibration.directivity import NORMAL_DEVIATE
from calibration.meter import Meter
from calibration.readings import Readings
from calibration.reflection import rho_from_swr, swr_from_rho
from calibration.units import wave_db

from .bridge_facts import interval_grid, middle_power_w, power_sds_db, show_powers_w
from .errors import BridgeIOError
from .fitted_file import FittedFile

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["FIGURES", "Picture", "PicturesMissing", "drawn", "pictures"]

Array = npt.NDArray[np.float64]

_FORWARD, _REFLECTED, _GOOD, _SKY = "#0072b2", "#d55e00", "#009e73", "#56b4e9"
_INK, _QUIET, _FAINT = "#1c2126", "#66717c", "#d8dee6"
_KINDS = {"dark": _QUIET, "power": _FORWARD, "reversed": _REFLECTED, "load": _GOOD}
#: A coupling that keeps within this [dB] is flat.
_LEAST_DB = 0.15
#: Bands of which intervals are drawn, at most: as many as can be compared at a glance.
_MOST_PANELS = 6
_SWR_TICKS = (1.0, 1.2, 1.5, 2.0, 3.0)
_STYLE: Any = {
    "font.size": 10,
    "axes.edgecolor": _QUIET,
    "axes.labelcolor": _INK,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.titlesize": 11,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "xtick.color": _QUIET,
    "ytick.color": _QUIET,
    "xtick.labelcolor": _INK,
    "ytick.labelcolor": _INK,
    "axes.grid": True,
    "grid.color": _FAINT,
    "grid.linewidth": 0.6,
    "axes.axisbelow": True,
    # Letters as outlines: the page looks the same wherever it is read. Names within the file repeat from run to run.
    "svg.fonttype": "path",
    "svg.hashsalt": "bridgewright",
}


class PicturesMissing(BridgeIOError):
    """matplotlib is not installed. The command line leaves with exit code 2."""


@dataclass(frozen=True, slots=True)
class Picture:
    """A drawing as SVG, and what it shows in a sentence."""

    svg: bytes
    caption: str


def pictures(fitted: FittedFile) -> dict[str, Picture]:
    """All pictures by name. PicturesMissing without matplotlib."""
    return {name: Picture(_svg(figure), FIGURES[name][1]) for name, figure in drawn(fitted).items()}


def drawn(fitted: FittedFile) -> dict[str, Figure]:
    """All pictures by name, as figures. PicturesMissing without matplotlib."""
    try:
        import matplotlib
        from matplotlib.figure import Figure
    except ImportError as error:
        raise PicturesMissing(
            "pictures need matplotlib, which is not installed; wanted for a page: pip install 'bridgewright[report]'; "
            "the report as text needs none"
        ) from error
    figures = {}
    with matplotlib.rc_context(_STYLE):
        for name, (draw, _, size) in FIGURES.items():
            figures[name] = Figure(figsize=size, layout="constrained")
            draw(figures[name], fitted)
    return figures


def _svg(figure: Figure) -> bytes:
    import matplotlib

    out = io.BytesIO()
    with matplotlib.rc_context(_STYLE):
        figure.savefig(out, format="svg", metadata={"Date": None, "Creator": None, "Format": None, "Type": None})
    return out.getvalue()


def _laws(figure: Figure, fitted: FittedFile) -> None:
    """Both laws over power, referred to the middle band, and what the known powers leave over."""
    axes = figure.subplots(2, 2, sharex="col", sharey="row", gridspec_kw={"height_ratios": [3, 1.3]})
    for column, side in enumerate(("forward", "reflected")):
        points = _law_points(fitted, side)
        _law_curve(axes[0, column], fitted, side, points)
        _law_strip(axes[1, column], fitted, side, points)
        for axis in (axes[0, column].xaxis, axes[0, column].yaxis):
            axis.set_major_formatter("{x:g}")
    axes[0, 0].set_ylabel("counts above dark")
    axes[1, 0].set_ylabel("law against\nwattmeter [%]")


def _law_points(fitted: FittedFile, side: str) -> Array:
    """Of the steps that show this detector a known power: power [W] as in the middle band, counts above dark, excess.

    The excess is how far [%] the power by the law lies above the wattmeter's. Shape (3, n).
    """
    bridge, ahead = fitted.bridge, side == "forward"
    law = bridge.forward_law if ahead else bridge.reflected_law
    middle = bridge.bands[len(bridge.bands) // 2]
    points = []
    for step in fitted.file.steps:
        band = band_at(step.frequency_hz, bridge.bands) if step.frequency_hz else None
        if band is None or step.kind != ("power" if ahead else "reversed"):
            continue
        counts = step.forward if ahead else step.reflected
        gain, there = (b.gain_forward if ahead else b.gain_reflected for b in (band, middle))
        watts = step_power_w(step, bridge.z0_ohm) or math.nan
        excess = 100.0 * (float(law.square(counts)) / gain**2 / watts - 1.0)
        points.append((watts * (gain / there) ** 2, counts - law.offset, excess))
    return np.array(points).reshape(-1, 3).T


def _law_curve(axes: Axes, fitted: FittedFile, side: str, points: Array) -> None:
    bridge, color = fitted.bridge, _FORWARD if side == "forward" else _REFLECTED
    law = bridge.forward_law if side == "forward" else bridge.reflected_law
    middle = bridge.bands[len(bridge.bands) // 2]
    gain = middle.gain_forward if side == "forward" else middle.gain_reflected
    most = float(law.square(0.99 * bridge.full_scale)) / gain**2
    watts = np.geomspace(min([*points[0], most]) / 30.0, most, 300)
    above = law.counts(watts * gain**2) - law.offset
    shown = above > 0.3
    axes.loglog(watts[shown], above[shown], color=color, lw=2)
    axes.loglog(points[0], points[1], "o", ms=5.5, mfc="white", mec=color, mew=1.4)
    axes.set_title(f"{side} detector", color=color)
    steps = "power steps" if side == "forward" else "reversed steps"
    if points.size:
        middle_point = points[:, np.argsort(points[0])[points.shape[1] // 2]]
        _beside(axes, steps, (middle_point[0], middle_point[1]), (12, -16))
    end = np.flatnonzero(shown)[len(watts[shown]) // 5] if shown.any() else 0
    _beside(axes, "law", (watts[end], above[end]), (-28, 10), color)


def _law_strip(axes: Axes, fitted: FittedFile, side: str, points: Array) -> None:
    scatter = fitted.fit.scatter_pct
    axes.axhspan(-2.0 * scatter, 2.0 * scatter, color=_FAINT, lw=0)
    axes.axhline(0.0, color=_QUIET, lw=1)
    color = _FORWARD if side == "forward" else _REFLECTED
    axes.semilogx(points[0], points[2], "o", ms=4.5, mfc="white", mec=color, mew=1.3)
    reach = max(4.0 * scatter, 1.15 * float(np.abs(points[2]).max(initial=0.0)))
    axes.set_ylim(-reach, reach)
    axes.set_xlabel("power at the port [W], as in the middle band")
    if side == "forward":
        axes.text(
            0.995, 0.04, "grey: twice the wattmeter's scatter", transform=axes.transAxes, ha="right", color=_QUIET
        )


def _leaks(figure: Figure, fitted: FittedFile) -> None:
    """Directivity and forward leak of each band, from their limit to their best value."""
    from matplotlib.ticker import MaxNLocator

    axes = figure.subplots()
    bands = fitted.bridge.bands
    for shift, color, name, best, limit in (
        (-0.12, _FORWARD, "directivity", [b.directivity for b in bands], [b.directivity_limit for b in bands]),
        (0.12, _REFLECTED, "forward leak", [b.forward_leak for b in bands], [b.forward_leak_limit for b in bands]),
    ):
        at = np.arange(len(bands)) + shift
        low, high = -wave_db(np.maximum(limit, 1e-3)), -wave_db(np.maximum(best, 1e-3))
        axes.vlines(at, low, np.maximum(high, low), color=color, lw=5, alpha=0.35)
        axes.plot(at, low, "_", color=color, ms=12, mew=2.4)
        axes.plot(at, high, "o", color=color, ms=6)
        axes.annotate(name, (at[-1], high[-1]), (10, 0), textcoords="offset points", color=color, va="center")
    dummy = fitted.file.ratings.dummy_return_loss_db
    axes.axhline(dummy, color=_QUIET, lw=1, ls=(0, (4, 3)))
    axes.annotate(
        f"dummy load used: {dummy:g} dB", (-0.4, dummy), (0, 4), textcoords="offset points", color=_QUIET, ha="left"
    )
    axes.margins(y=0.12)
    axes.yaxis.set_major_locator(MaxNLocator(integer=True))
    axes.set_ylabel("below the wave [dB]; higher is better")
    _band_axis(axes, fitted, 1.13 * len(bands) - 0.5)


def _gains(figure: Figure, fitted: FittedFile) -> None:
    """Coupling of both detectors against the middle band, and their balance with its 95 % range."""
    left, right = figure.subplots(1, 2)
    bands = fitted.bridge.bands
    middle = len(bands) // 2
    against = {name: wave_db([getattr(band, f"gain_{name}") for band in bands]) for name in ("forward", "reflected")}
    above = (
        against["forward"][-1] - against["forward"][middle] > against["reflected"][-1] - against["reflected"][middle]
    )
    for (name, gains), color, mark in zip(against.items(), (_FORWARD, _REFLECTED), ("o-", "s-"), strict=True):
        up = above == (name == "forward")
        end = (len(bands) - 1, gains[-1] - gains[middle])
        left.plot(gains - gains[middle], mark, color=color, ms=5, lw=1.4, mfc="white")
        left.annotate(name, end, (8, 4 if up else -10), textcoords="offset points", color=color)
    left.set_title("coupling against the middle band")
    left.set_ylabel("[dB]")
    _at_least(left, _LEAST_DB)
    power = middle_power_w(fitted)
    reach = [NORMAL_DEVIATE * power_sds_db(fitted.bridge, band, power, 2.0)[2] for band in bands]
    balance = wave_db([band.gain_reflected / band.gain_forward for band in bands])
    right.errorbar(
        np.arange(len(bands)), balance, reach, fmt="o", color=_GOOD, ms=6, elinewidth=4, ecolor=f"{_GOOD}59", capsize=0
    )
    right.set_title("reflected against forward, 95 %")
    _at_least(right, _LEAST_DB)
    _band_axis(left, fitted, 1.18 * len(bands) - 0.5)
    _band_axis(right, fitted, len(bands) - 0.5)


def _at_least(axes: Axes, reach: float) -> None:
    """Show no less than -reach to reach, so that a flat course looks flat."""
    low, high = axes.get_ylim()
    axes.set_ylim(min(low, -reach), max(high, reach))


def _intervals(figure: Figure, fitted: FittedFile) -> None:
    """What the interval says over SWR, a panel a band, at the largest and smallest of the powers told in the table."""
    bands = fitted.bridge.bands
    chosen = sorted({round(place) for place in np.linspace(0, len(bands) - 1, min(len(bands), _MOST_PANELS))})
    columns = min(3, len(chosen))
    grid = figure.subplots(math.ceil(len(chosen) / columns), columns, sharex=True, sharey=True, squeeze=False)
    meter, powers = Meter(fitted.bridge), show_powers_w(fitted)
    rho = np.linspace(0.003, float(rho_from_swr(_SWR_TICKS[-1])), 100)
    for axes, place in zip(grid.flat, chosen, strict=False):
        strong, weak = (
            _ends(interval_grid(meter, bands[place], p, swr_from_rho(rho))) for p in (powers[-1], powers[0])
        )
        axes.fill_between(rho, *strong, color=_SKY, alpha=0.45, lw=0)
        axes.plot(rho, rho, color=_INK, lw=0.9)
        if len(powers) > 1:
            axes.plot(rho, np.transpose(weak), color=_REFLECTED, lw=1.1, ls=(0, (4, 2)))
        axes.set_title(f"{bands[place].frequency_hz / 1e6:.3f} MHz")
        _swr_axes(axes)
    for axes in list(grid.flat)[len(chosen) :]:
        axes.set_visible(False)
    first = grid[0, 0]
    first.text(0.04, 0.92, f"{powers[-1]:g} W: shaded", transform=first.transAxes, color=_FORWARD)
    if len(powers) > 1:
        first.text(0.04, 0.83, f"{powers[0]:g} W: dashed", transform=first.transAxes, color=_REFLECTED)
    figure.supxlabel("SWR of the ratio read", fontsize=10, color=_INK)
    figure.supylabel("95 % interval of SWR", fontsize=10, color=_INK)


def _ends(found: Readings) -> tuple[Array, Array]:
    """Both ends in rho; what is not bounded ends at 1."""
    return np.nan_to_num(found.rho_low), np.minimum(np.where(np.isnan(found.rho_high), 1.0, found.rho_high), 1.0)


def _swr_axes(axes: Axes) -> None:
    """Linear in reflection and labelled in SWR, as the scale of the live screen is."""
    ticks, more = rho_from_swr(_SWR_TICKS), (*_SWR_TICKS, 4.0)
    axes.set_xticks(ticks, [f"{swr:g}" for swr in _SWR_TICKS])
    axes.set_yticks(rho_from_swr(more), [f"{swr:g}" for swr in more])
    axes.set_xlim(0.0, ticks[-1])
    axes.set_ylim(0.0, float(rho_from_swr(4.2)))


def _residuals(figure: Figure, fitted: FittedFile) -> None:
    """Every residual over its step, in sd, by kind of step."""
    axes = figure.subplots()
    kinds = {number: step.kind for number, step in enumerate(fitted.file.steps, 1)}
    rows = [(number, off) for number, _, off in fitted.fit.residuals if number in kinds]
    axes.axhspan(-2.0, 2.0, color=_FAINT, lw=0)
    axes.axhline(0.0, color=_QUIET, lw=1)
    for place, (kind, color) in enumerate(_KINDS.items()):
        own = np.array([row for row in rows if kinds[row[0]] == kind]).reshape(-1, 2)
        if not len(own):
            continue
        axes.vlines(own[:, 0], 0.0, own[:, 1], color=color, lw=1.6)
        axes.plot(own[:, 0], own[:, 1], "o", color=color, ms=4)
        axes.text(0.01 + 0.11 * place, 1.02, kind, color=color, transform=axes.transAxes)
    reach = max(3.2, 1.15 * max((abs(off) for _, off in rows), default=0.0))
    axes.set_ylim(-reach, reach)
    axes.set_xlabel("step")
    axes.set_ylabel("off the fit [sd]")


def _band_axis(axes: Axes, fitted: FittedFile, end: float) -> None:
    """Bands side by side, named by frequency."""
    bands = fitted.bridge.bands
    names = [f"{band.frequency_hz / 1e6:.4g}" for band in bands]
    axes.set_xticks(np.arange(len(bands)), names, rotation=90 if len(bands) > 8 else 0)
    axes.set_xlim(-0.5, end)
    axes.set_xlabel("band [MHz]")
    axes.grid(False, axis="x")


def _beside(axes: Axes, words: str, at: Sequence[float], offset: tuple[int, int], color: str = _QUIET) -> None:
    axes.annotate(words, (at[0], at[1]), offset, textcoords="offset points", color=color)


_Draw = Callable[["Figure", FittedFile], None]
#: name -> how it is drawn, what it shows, and its size [inches].
FIGURES: dict[str, tuple[_Draw, str, tuple[float, float]]] = {
    "law": (
        _laws,
        "Counts above dark over power: each detector's law as a line, the bench steps that show it a known power as "
        "rings; below, what the law makes of them against the wattmeter. A reversed step also shows the bridge's own "
        "small loss.",
        (9.2, 5.2),
    ),
    "leaks": (
        _leaks,
        "Leakage of each band: the dot is the best value, the foot of the bar the 95 % limit that intervals use.",
        (9.2, 3.6),
    ),
    "gains": (
        _gains,
        "Left: how the coupling of both detectors goes over the bands. Right: reflected against forward gain, with the "
        "95 % range of the ratio of powers at SWR 2.",
        (9.2, 3.2),
    ),
    "intervals": (
        _intervals,
        "The 95 % interval of a single reading over the SWR of the ratio read (thin line). Where it reaches the floor, "
        "a perfect match cannot be told from this SWR.",
        (9.2, 5.8),
    ),
    "residuals": (
        _residuals,
        "Residuals of the fit, step by step, in standard deviations; grey is twice that.",
        (9.2, 3.0),
    ),
}
