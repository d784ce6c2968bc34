"""How the desk reads: temperature and zero as the bridge has them, averages, hard bounds, swapped ports."""

from dataclasses import replace

import numpy as np
import pytest

from bridgeio.bridge_file import parse_bridge_file
from bridgeio.desk import Desk, Reading
from bridgeio.frames import Conditions, Nameplate, Tallies
from calibration.flags import names
from calibration.warmth import DIODES
from tests import fitted

HZ = 14.2e6


class Clock:
    """A clock that is set by hand."""

    now_s = 0.0

    def __call__(self):
        return self.now_s


def bridge_file(**told):
    """The shed bridge; its diodes are germanium."""
    file = parse_bridge_file(fitted.bridge_text(12), "shed.toml")
    return replace(file, bridge=replace(file.bridge, **told)) if told else file


def plate():
    """A nameplate that fits it."""
    return Nameplate(0, 0, 0, 1, 0, 10, 1, 4095, 0, 2, 0, 0, "shed")


def tallies(forward, reflected, first=0):
    """Checked tallies, 10 ms apart, numbered from `first`."""
    n = len(forward)
    at = np.arange(first, first + n)
    return Tallies(
        (at % 256).astype(np.uint8),
        (10 * at).astype(np.uint32),
        np.array(forward, dtype=float),
        np.array(reflected, dtype=float),
        np.zeros(n, dtype=np.uint8),
    )


def warmth(celsius):
    """Conditions that tell a temperature and no frequency."""
    return Conditions(0, 0, round(100 * celsius), 0, 0)


def taken(desk, *items):
    """Batches of these items after a nameplate."""
    return list(desk.take([plate(), *items], 100.0))


def flags_of(batch):
    """Names of the flags of each reading."""
    return [set(names(bits)) for bits in batch.readings.flags]


def test_temperature_told_by_the_bridge_moves_the_law():
    """At 45 degrees a weak forward count means less power than at 25: a warm diode detects more (conduction rises)."""
    reads = {}
    for celsius in (None, 25.0, 45.0):
        desk = Desk([bridge_file(diode=DIODES["germanium"])], Reading(HZ))
        items = [] if celsius is None else [warmth(celsius)]
        (batch,) = taken(desk, *items, tallies([60.0], [4.0]))
        reads[celsius] = batch.readings.forward_w[0]
    assert reads[None] == reads[25.0]
    assert abs(reads[45.0] / reads[25.0] - 1) > 0.02


def test_temperature_is_forgotten_when_old_and_unknown_is_no_temperature():
    """A minute after the last word on it the bench's temperature holds again; -32768 says nothing."""
    clock = Clock()
    desk = Desk([bridge_file()], Reading(HZ), clock=clock)
    taken(desk, warmth(45.0))
    assert desk.temperature_c == 45.0
    clock.now_s = 61.0
    assert desk.temperature_c is None
    taken(desk, Conditions(0, 0, -32768, 0, 0))
    assert desk.temperature_c is None


def test_dark_count_that_drifts_is_flagged_and_widens():
    """Key up for 20 s while the dark count creeps up by 3 counts: flagged, the interval of a weak load widens."""
    clock = Clock()
    desk = Desk([bridge_file()], Reading(HZ), clock=clock)
    random = np.random.default_rng(2)
    (before,) = taken(desk, tallies([600.0], [40.0]))
    assert "dark-moved" not in flags_of(before)[0]
    for second in range(1, 90):
        clock.now_s = float(second)
        creep = min(second / 20.0, 3.0)
        noise = random.normal(0, 0.85, (2, 100))
        taken(desk, tallies(5.12 + creep + noise[0], 2.58 + creep + noise[1], first=100 * second))
    assert desk.dark == pytest.approx((8.12, 5.58), abs=0.5)
    (after,) = taken(desk, tallies([600.0], [40.0]))
    assert "dark-moved" in flags_of(after)[0]
    assert after.readings.rho_low[0] < before.readings.rho_low[0]
    assert after.readings.rho[0] == before.readings.rho[0]


def test_live_dark_is_the_zero():
    """With the running dark count as zero the same counts read less reflected power, and nothing is flagged."""
    clock = Clock()
    desk = Desk([bridge_file()], Reading(HZ, live_dark=True), clock=clock)
    random = np.random.default_rng(2)
    for second in range(70):
        clock.now_s = float(second)
        noise = random.normal(0, 0.85, (2, 100))
        taken(desk, tallies(7.12 + noise[0], 4.58 + noise[1], first=100 * second))
    (batch,) = taken(desk, tallies([600.0], [12.0]))
    plain = Desk([bridge_file()], Reading(HZ))
    (other,) = taken(plain, tallies([600.0], [12.0]))
    assert batch.readings.rho[0] < other.readings.rho[0]
    assert "dark-moved" not in flags_of(batch)[0]


def test_average_is_of_powers_and_says_its_size():
    """Two levels averaged give the mean of their powers, not the power of the mean count; counts are means."""
    desk = Desk([bridge_file()], Reading(HZ, average=10), live=True)
    single = Desk([bridge_file()], Reading(HZ))
    forward = np.tile([300.0, 900.0], 10)
    reflected = np.tile([60.0, 180.0], 10)
    groups = [batch for batch in taken(desk, tallies(forward, reflected), tallies([300.0], [60.0], first=20))]
    (each,) = taken(single, tallies(forward, reflected))
    averaged = np.concatenate([batch.averaged for batch in groups])
    assert averaged.tolist() == [10, 10]
    power = np.concatenate([batch.readings.forward_w for batch in groups])
    assert power == pytest.approx(np.full(2, each.readings.forward_w.mean()), rel=1e-6)
    assert groups[0].readings.forward_counts[0] == pytest.approx(600.0)
    assert desk.waiting == 1


def test_average_never_crosses_a_key_down_or_a_gap():
    """Groups end where the carrier comes or frames are missing; sizes say so; how the tallies arrive is no matter."""
    forward = np.array([5.0] * 4 + [600.0] * 9)
    reflected = np.array([2.5] * 4 + [100.0] * 9)
    whole = Desk([bridge_file()], Reading(HZ, average=5))
    after_gap = tallies([600.0] * 6, [100.0] * 6, first=40)
    groups = taken(whole, tallies(forward, reflected), after_gap)
    sizes = [int(size) for batch in groups for size in batch.averaged]
    assert sizes == [4, 4, 4, 5]  # dark; the first of the key-down left out of five; to the gap; five after it
    pieces = Desk([bridge_file()], Reading(HZ, average=5))
    parts = [tallies(forward[at : at + 2], reflected[at : at + 2], first=at) for at in range(0, 13, 2)]
    again = taken(pieces, *parts, after_gap)
    assert [int(size) for batch in again for size in batch.averaged] == sizes


def test_hard_bounds_are_wider():
    """--hard: nothing can exceed what is shown, so it is never narrower."""
    reads = [
        taken(Desk([bridge_file()], Reading(HZ, hard=hard)), tallies([600.0], [100.0]))[0] for hard in (False, True)
    ]
    soft, hard = (batch.readings for batch in reads)
    assert hard.swr_low[0] < soft.swr_low[0] < soft.swr_high[0] < hard.swr_high[0]


def test_swapped_is_told_across_batches():
    """One reading with more back than an open returns says nothing; the next such one, in another batch, does."""
    desk = Desk([bridge_file()], Reading(HZ))
    (one,) = taken(desk, tallies([100.0], [600.0]))
    (two,) = taken(desk, tallies([100.0], [600.0], first=1))
    assert "swapped" not in flags_of(one)[0]
    assert "swapped" in flags_of(two)[0]


def test_wide_counts_are_read_like_others():
    """A 24-bit bridge's counts give the same reading as the 12-bit ones they are 4096 times of."""
    file = bridge_file()
    scale = 4096.0

    def widened(law):
        return replace(law, offset=law.offset * scale, scale=law.scale * scale)

    narrow = file.bridge
    bridge = replace(
        narrow,
        full_scale=4095 * 4096,
        forward_law=widened(narrow.forward_law),
        reflected_law=widened(narrow.reflected_law),
        forward_sd=narrow.forward_sd * scale,
        reflected_sd=narrow.reflected_sd * scale,
        bands=tuple(replace(band, covariance=0.0 * band.covariance) for band in narrow.bands),
    )
    wide = Desk([replace(file, bridge=bridge, full_scale=4095 * 4096)], Reading(HZ))
    items = [replace(plate(), full_scale=4095 * 4096), replace(tallies([600 * scale], [100 * scale]), wide=True)]
    (batch,) = wide.take(items, 0.0)
    (other,) = taken(Desk([file], Reading(HZ)), tallies([600.0], [100.0]))
    assert batch.readings.forward_w == pytest.approx(other.readings.forward_w, rel=1e-4)
    assert batch.readings.swr == pytest.approx(other.readings.swr, rel=1e-4)
