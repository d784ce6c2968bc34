"""Losses by `seq` and `ms`: claimed as far as the frames prove them."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bridgeio.account import Counters, Losses
from bridgeio.frames import Nameplate


def plate(seq: int, ms: int, boot: int = 1, period_ms: int = 0, device_id: int = 7) -> Nameplate:
    """A nameplate of which only what the account looks at matters."""
    return Nameplate(seq, ms, 0, boot, device_id, period_ms, 16, 65520, 0, 0, 0, 1, "x")


def follow(*frames: tuple[int, int], period_ms: int = 0) -> Counters:
    """The counters after frames given as (seq, ms), behind a nameplate where there is a period."""
    losses = Losses(counters := Counters())
    if period_ms:
        losses.nameplate(plate(0, 0, period_ms=period_ms))
    for seq, ms in frames:
        losses.frame(seq, ms)
    return counters


@pytest.mark.parametrize("last", [0, 100, 254, 255])
@pytest.mark.parametrize("lost", [0, 1, 2, 100, 254])
def test_losses_by_seq_alone(last: int, lost: int) -> None:
    """A step in seq is that many frames less one, around the corner too."""
    assert follow((last, 0), ((last + 1 + lost) % 256, 10)).lost == lost


def test_losses_by_seq_and_ms_count_whole_rounds() -> None:
    """With a gap and a period, ms tells how often seq went round."""
    sent = 1000
    assert follow((0, 0), (sent % 256, sent * 10), period_ms=10).lost == sent - 1


def test_losses_without_a_period_are_the_least_possible() -> None:
    """Without a period nothing beyond seq is claimed."""
    assert follow((0, 0), (1000 % 256, 10_000)).lost == (1000 - 1) % 256


def test_losses_are_none_where_the_bridge_paused() -> None:
    """A seq that runs on without a gap after a long time says that nothing was sent between."""
    assert follow((5, 0), (6, 600_000), period_ms=10).lost == 0


@settings(deadline=None)
@given(lost=st.integers(1, 3000), period_ms=st.integers(1, 100), jitter=st.floats(-0.03, 0.03))
def test_losses_never_exceed_what_was_lost(lost: int, period_ms: int, jitter: float) -> None:
    """Whatever the clock's jitter, the count is at most the truth and right modulo 256."""
    ms = max(1, round((lost + 1) * period_ms * (1 + jitter)))
    counted = follow((0, 1000), ((lost + 1) % 256, 1000 + ms), period_ms=period_ms).lost
    assert counted <= lost
    assert (counted - lost) % 256 == 0 or lost % 256 == 0


def test_repeated_frame_is_no_loss() -> None:
    """The same seq and ms again is a repeat, not 255 frames lost."""
    counters = follow((5, 100), (5, 100), (5, 100), (6, 110))
    assert (counters.lost, counters.repeated) == (0, 2)


@pytest.mark.parametrize(("ms", "resets"), [(99_750, 0), (99_749, 1), (0, 1)])
def test_ms_falling_is_a_restart_only_beyond_its_tolerance(ms: int, resets: int) -> None:
    """A fall of more than 250 ms is a restart, and the loss before it is not claimed."""
    counters = follow((10, 100_000), (20, ms))
    assert counters.resets == resets
    assert counters.lost == (0 if resets else 9)


def test_ms_going_round_is_no_restart() -> None:
    """After 49.7 days ms begins at 0 again, and counting goes on."""
    counters = follow((10, 2**32 - 5), (13, 5))
    assert (counters.resets, counters.lost) == (0, 2)


@pytest.mark.parametrize("change", [{"boot": 2}, {"device_id": 8}])
def test_nameplate_of_another_start_or_board_begins_afresh(change: dict[str, int]) -> None:
    """Another boot or device id is a restart; its seq is not compared with the old one."""
    losses = Losses(counters := Counters())
    losses.nameplate(plate(0, 0))
    losses.frame(0, 0)
    losses.nameplate(plate(77, 10, **change))
    losses.frame(77, 10)
    losses.frame(79, 20)
    assert (counters.resets, counters.lost) == (1, 1)


def test_restart_seen_by_ms_is_not_counted_again_by_its_nameplate() -> None:
    """One restart is one, though ms and boot both show it."""
    losses = Losses(counters := Counters())
    losses.nameplate(plate(0, 50_000))
    losses.frame(0, 50_000)
    losses.frame(0, 10)
    losses.nameplate(plate(1, 20, boot=2))
    losses.frame(1, 20)
    assert counters.resets == 1


@pytest.mark.parametrize(("boot", "lost"), [(1, 41), (2, 0)])
def test_reopened_port_claims_the_loss_only_for_the_same_start(boot: int, lost: int) -> None:
    """Frames missed while the port was closed count once the nameplate shows the same boot."""
    losses = Losses(counters := Counters())
    losses.nameplate(plate(7, 70))
    losses.frame(7, 70)
    losses.reopened()
    losses.frame(49, 490)
    assert counters.lost == 0
    losses.nameplate(plate(50, 500, boot=boot))
    losses.frame(50, 500)
    assert counters.lost == lost


@pytest.mark.parametrize("before", [None, 0])
def test_reopened_port_claims_nothing_where_the_start_is_not_known(before: int | None) -> None:
    """Without a nameplate before, or with a boot of 0, nobody knows whether it is the same start."""
    losses = Losses(counters := Counters())
    if before is not None:
        losses.nameplate(plate(7, 70, boot=before))
    losses.frame(7, 70)
    losses.reopened()
    losses.nameplate(plate(50, 500, boot=1 if before is None else before))
    losses.frame(50, 500)
    assert counters.lost == 0


@settings(deadline=None)
@given(st.lists(st.tuples(st.integers(0, 255), st.integers(0, 2**32 - 1)), min_size=1, max_size=30), st.data())
def test_block_counts_as_frame_by_frame(frames: list[tuple[int, int]], data: st.DataObject) -> None:
    """Arrays and single frames give the same counters."""
    one, many = Counters(), Counters()
    single, block = Losses(one), Losses(many)
    for seq, ms in frames:
        single.frame(seq, ms)
    cut = data.draw(st.integers(0, len(frames)))
    for part in (frames[:cut], frames[cut:]):
        if part:
            block.block(np.array([s for s, _ in part], np.uint8), np.array([m for _, m in part], np.uint32))
    assert one == many


def test_copy_of_counters_stays_as_it_was() -> None:
    """A copy does not follow the original."""
    counters = Counters()
    kept = counters.copy()
    counters.frames[0x11] += 1
    counters.bad_crc += 1
    assert (kept.frames[0x11], kept.damaged, counters.damaged) == (0, 0, 1)
