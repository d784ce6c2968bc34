"""The block reader gives what the meter gives, code by code."""

from dataclasses import replace

import numpy as np
import pytest

from calibration.block import BlockReader
from calibration.flags import bit
from calibration.meter import Meter
from tests import shed


@pytest.mark.parametrize("bits", [12, 16])
def test_block_equals_the_meter(bits):
    """Over random codes, edges included, columns agree within 1e-4 and unknowns and flags are the same."""
    bridge = shed.fitted(bits).bridge
    random = np.random.default_rng(5)
    top = bridge.full_scale
    forward = np.concatenate([random.integers(0, top + 1, 20_000), np.arange(200), random.integers(0, top, 2000)])
    reflected = np.concatenate(
        [random.integers(0, top // 2, 20_000), np.arange(200)[::-1], random.integers(0, 60, 2000)]
    )
    band = bridge.bands[3]
    block = BlockReader(bridge, band).read(forward.astype(np.uint16), reflected.astype(np.uint16))
    plain = Meter(bridge).read(forward, reflected, frequency_hz=band.frequency_hz)
    usual = ~(plain.rho >= 2.0)  # beyond, only swapped wires go; there the block's rho stands still
    for name in ("forward_w", "reflected_w", "net_w", "rho"):
        exact, quick = getattr(plain, name)[usual], getattr(block, name)[usual]
        assert (np.isnan(exact) == np.isnan(quick)).all(), name
        of_forward = 1.0 if name == "net_w" else 1e-3  # net is a difference of the two
        scale = np.maximum(np.abs(exact), of_forward * plain.forward_w[usual] + 1e-6)
        assert np.nanmax(np.abs(quick - exact) / scale) < 3e-4, name
    assert (block.rho[~usual] >= 1.9).all()
    shown = plain.rho < 0.99
    assert block.swr[shown] == pytest.approx(plain.swr[shown], rel=5e-3)
    # `swapped` and `over-unity` need more than the codes of one pair.
    asked = ~np.uint32(bit("swapped") | bit("over-unity"))
    assert (block.flags & asked == plain.flags & asked).all()


def test_block_takes_the_wires_clip_flags():
    """A frame that says clipped hides rho (reflected) and is flagged, whatever its codes are."""
    bridge = shed.fitted(12).bridge
    codes = np.array([900, 900, 900], dtype=np.uint16)
    block = BlockReader(bridge, bridge.bands[3]).read(codes, codes // 3, np.array([0, 1, 2], dtype=np.uint8))
    assert (block.flags & bit("clipped") != 0).tolist() == [False, True, True]
    assert np.isnan(block.rho).tolist() == [False, False, True]


def test_block_refuses_wide_codes():
    """A wide converter's counts are no 16-bit codes."""
    bridge = replace(shed.fitted(12).bridge, full_scale=1 << 20)
    with pytest.raises(ValueError, match="1048576"):
        BlockReader(bridge, bridge.bands[0])
