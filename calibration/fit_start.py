"""Where a fit begins: laws from a grid of scale and load term, gains from the wattmeter.

One rule: a start is found by looking everywhere, since scale and load term trade off and a poor start ends in a
false minimum.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from .fit_model import LAW_SIZE, BenchModel
from .laws import DiodeLaw

__all__ = ["start_vectors"]

Array = npt.NDArray[np.float64]

_LOAD_TERMS = np.log(np.geomspace(0.02, 100.0, 19))
#: Scale as part of the largest count met: a detector works from about its foot to a few hundred nVt.
_SCALE_PARTS = np.log(np.geomspace(5e-4, 1.0, 41))


def start_vectors(model: BenchModel) -> list[Array]:
    """Starting vectors, best guess first; they differ in the sign of the leaks' imaginary parts."""
    base = model.priors[0].copy()
    forward = _law_start(model, "power", 0)
    assert forward is not None, "a fit demands power steps"
    reflected = _law_start(model, "reversed", 1)
    base[:LAW_SIZE] = forward
    dark = _dark(model, 1)
    base[LAW_SIZE : 2 * LAW_SIZE] = (dark, *forward[1:]) if reflected is None else reflected
    for band in range(len(model.bands)):
        _start_band(model, base, band, turned=reflected is not None)
    return [_with_leaks(model, base, sign) for sign in (1.0, -1.0)]


def _with_leaks(model: BenchModel, base: Array, sign: float) -> Array:
    """Small leaks in place: at exactly zero a dummy's reading has no slope in them."""
    vector = base.copy()
    for band in range(len(model.bands)):
        at = model.band_slice(band).start
        vector[at + 2 : at + 6] = 0.02, sign * 0.02, 0.01, sign * 0.01
    return vector


def _start_band(model: BenchModel, vector: Array, band: int, *, turned: bool) -> None:
    forward, reflected = (DiodeLaw.from_parameters(vector[at : at + LAW_SIZE]) for at in (0, LAW_SIZE))
    at = model.band_slice(band).start
    vector[at] = _gain(model, "power", band, forward, 0)
    own = _gain(model, "reversed", band, reflected, 1) if turned else np.nan
    vector[at + 1] = vector[at] if np.isnan(own) else own


def _gain(model: BenchModel, kind: str, band: int, law: DiodeLaw, channel: int) -> float:
    steps = [model.steps[at] for at in model.of_kind[kind] if model.band[at] == band]
    counts = np.array([(s.forward, s.reflected)[channel] for s in steps])
    watts = np.array([s.power_w for s in steps], dtype=float)
    squares = law.square(counts)
    good = squares > 0.0
    if not good.any():
        return float("nan")
    return float(0.5 * np.mean(np.log(squares[good] / watts[good])))


def _dark(model: BenchModel, channel: int) -> float:
    steps = [model.steps[at] for at in model.of_kind["dark"]]
    return float(np.mean([(s.forward, s.reflected)[channel] for s in steps]))


def _law_start(model: BenchModel, kind: str, channel: int) -> Array | None:
    """Offset, ln scale and ln load term with the least scatter of ln gain within bands; None with too few steps."""
    at = model.of_kind[kind]
    if len(at) < 2:
        return None
    steps = [model.steps[step] for step in at]
    counts = np.array([(s.forward, s.reflected)[channel] for s in steps])
    watts = np.array([s.power_w for s in steps], dtype=float)
    offset = min(_dark(model, channel), float(counts.min()) - 1e-3)
    scales = _SCALE_PARTS + np.log(counts.max())
    grid = np.array([(offset, scale, load) for scale in scales for load in _LOAD_TERMS])
    log_gain = 0.5 * np.log(DiodeLaw.stacked(grid).square(counts) / watts)
    scatter = np.zeros(len(grid))
    for band in np.unique(model.band[at]):
        own = log_gain[:, model.band[at] == band]
        scatter += np.square(own - own.mean(axis=1, keepdims=True)).sum(axis=1)
    return np.asarray(grid[int(np.argmin(scatter))])
