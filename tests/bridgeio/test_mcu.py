"""The firmware kit on a simulated ATmega328P: size, cycles, and what the running chip says over its line."""

from __future__ import annotations

import functools
import itertools
import random
import re
import shutil
import statistics
from pathlib import Path
from typing import TypeVar

import numpy as np
import pytest

from bridgeio.firmware_kit import kit_text, write_kit
from bridgeio.frames import (
    FLAG_DROPPED,
    FLAG_FORWARD_CLIPPED,
    FLAG_REFLECTED_CLIPPED,
    TEMPERATURE_UNKNOWN,
    Conditions,
    Crest,
    Item,
    Nameplate,
    Remark,
    Tallies,
)
from bridgeio.framing import pack
from bridgeio.receiver import Receiver
from tests.mcu.board import (
    BROWN_OUT,
    FULL_CODE,
    KIT,
    POWER_ON,
    RESET_PIN,
    WATCHDOG,
    Board,
    avr_elf,
    code,
    needs_board,
    run_tool,
    workshop,
)

pytestmark = needs_board

FLASH_LIMIT, CYCLES_LIMIT = 450, 1800
PERIOD_MS, SUMMED, SLOT_MS = 10, 16, 10 / 32
RUN_MS = 40_000

Frame = TypeVar("Frame", Nameplate, Crest, Remark, Conditions)


def received(data: bytes) -> tuple[list[Item], Receiver]:
    """Everything in a run's bytes, and the receiver with its counters."""
    receiver = Receiver(from_start=True)
    return receiver.feed(data), receiver


def tallies_of(items: list[Item]) -> Tallies:
    """All tallies as one block."""
    blocks = [item for item in items if isinstance(item, Tallies)]
    seq, ms, forward, reflected, flags = (
        np.concatenate([getattr(block, name) for block in blocks])
        for name in ("seq", "ms", "forward", "reflected", "flags")
    )
    return Tallies(seq, ms, forward, reflected, flags)


def only(kind: type[Frame], items: list[Item]) -> list[Frame]:
    """All frames of one rare kind."""
    return [item for item in items if isinstance(item, kind)]


def in_order(items: list[Item]) -> list[tuple[int, bool, int]]:
    """Every frame as (seq, carries counts, flags), in the order of the wire."""
    frames: list[tuple[int, bool, int]] = []
    for item in items:
        if isinstance(item, Tallies):
            frames += [(s, True, f) for s, f in zip(item.seq.tolist(), item.flags.tolist(), strict=True)]
        else:
            frames.append((item.seq, isinstance(item, Crest), getattr(item, "flags", 0)))
    return frames


# ---- size and cycles ------------------------------------------------------------------------------------------


@functools.cache
def figures() -> dict[str, int]:
    """What README tells as measured, measured: bytes and cycles."""
    tally, whole = workshop() / "tally.elf", avr_elf()
    flags = ("-mmcu=atmega328p", "-std=c99", "-Os", "-ffunction-sections", "-nostartfiles", "-Wl,--gc-sections")
    run_tool("avr-gcc", *flags, "-Wl,-e,bw_put_tally", KIT / "bridgewire.c", "-o", tally)
    path_text, path_data, path_bss = sizes(tally)
    text, data, bss = sizes(whole)
    cycles, _ = timed_tallies()
    return {
        "tally path, flash": path_text,
        "tally path, static RAM": path_data + path_bss,
        "encoder with every kind, flash": sizes(encoder_object())[0],
        "tally, fewest cycles": min(cycles),
        "tally, median cycles": int(statistics.median(cycles)),
        "tally, most cycles": max(cycles),
        "example, flash": text + data,
        "example, static RAM": data + bss,
    }


def encoder_object() -> Path:
    """The whole encoder, compiled and not linked, so that nothing is left out."""
    out = workshop() / "bridgewire.avr.o"
    run_tool("avr-gcc", "-mmcu=atmega328p", "-std=c99", "-Os", "-c", KIT / "bridgewire.c", "-o", out)
    return out


def sizes(elf: Path) -> tuple[int, int, int]:
    """text, data and bss [bytes] of a program, linked or not."""
    text, data, bss = run_tool("avr-size", elf).splitlines()[1].split()[:3]
    return int(text), int(data), int(bss)


@functools.cache
def timed_tallies() -> tuple[list[int], bytes]:
    """Cycles a packed tally for 2000 tallies full of zero bytes and not, marks' own cost off, and all frames sent."""
    with Board(firmware=avr_elf(source="cycles.c"), stop_after_ms=4000) as board:
        data = board.read_to_end()
        own, *cycles = board.cycles()
    return [count - own for count in cycles], data


def test_tally_path_fits_its_flash_and_takes_no_ram() -> None:
    """Tally function, check and stuffing, linked alone with all they need, stay within 450 bytes and no RAM."""
    assert figures()["tally path, flash"] <= FLASH_LIMIT
    assert figures()["tally path, static RAM"] == 0


def test_encoder_has_no_static_memory() -> None:
    """The whole encoder, every kind, has neither data nor bss."""
    assert sizes(encoder_object())[1:] == (0, 0)


def test_tally_takes_few_cycles() -> None:
    """No tally of 2000, with zero bytes in every pattern, takes more than 1800 cycles."""
    cycles, _ = timed_tallies()
    assert len(cycles) == 2000
    assert max(cycles) <= CYCLES_LIMIT


def test_chip_packs_the_same_bytes_as_the_host() -> None:
    """Compiled for the 8-bit machine, with its 16-bit int, the encoder still makes the reference bytes."""
    _, data = timed_tallies()
    items, receiver = received(data)
    assert {kind: n for kind, n in receiver.counters.frames.items() if n} == {0x11: 2000, 0x15: 2000, 0x17: 2000}
    assert b"".join(pack(item) for item in items) == data


def test_readme_tells_the_figures_as_measured() -> None:
    """The table in the kit's README holds what is measured here, to 5 % for another compiler's sake."""
    rows = re.findall(r"^\| ([^|]+?) \| (\d+)\b", kit_text("README.md").decode(), re.MULTILINE)
    told = {name: int(number) for name, number in rows}
    measured = figures()
    assert told.keys() >= measured.keys()
    assert {name: told[name] for name in measured} == pytest.approx(measured, rel=0.05)


# ---- the running chip -----------------------------------------------------------------------------------------


def staircase(seed: int) -> list[tuple[float, int, int]]:
    """(ms, forward_mv, reflected_mv): levels that differ in both channels, steps at odd instants within tallies."""
    dice = random.Random(seed)
    at, levels = 0.0, [(0.0, 500, 100)]
    while at < RUN_MS - 1000:
        at += dice.uniform(80, 400)
        forward, reflected = dice.randint(0, 1090), dice.randint(0, 1090)
        if abs(forward - levels[-1][1]) > 20 < abs(reflected - levels[-1][2]):
            levels.append((at, forward, reflected))
    return levels


@functools.cache
def long_run() -> tuple[list[tuple[float, int, int]], bytes]:
    """A staircase, and all that the chip said about it, every kind that the example can send in between."""
    levels = staircase(7)
    choices = ("CONDITIONS_S=10", "TEMPERATURE_C100=-525", "FREQUENCY_HZ=14100000UL")
    with Board(levels, firmware=avr_elf(*choices), stop_after_ms=RUN_MS) as board:
        return levels, board.read_to_end()


def codes_of_a_tally(old: tuple[int, int], new: tuple[int, int], split: int) -> list[tuple[int, int]]:
    """The 16 pairs (forward, reflected) of a tally whose first `split` conversions, in order F R R F, see `old`."""
    order = [0, 1, 1, 0] * (SUMMED // 2)
    seen = [(old if slot < split else new)[channel] for slot, channel in enumerate(order)]
    return [(a, b) if order[2 * i] == 0 else (b, a) for i, (a, b) in enumerate(zip(seen[::2], seen[1::2], strict=True))]


def sums(pairs: list[tuple[int, int]]) -> tuple[int, int]:
    """Sum of each channel."""
    return sum(pair[0] for pair in pairs), sum(pair[1] for pair in pairs)


def account_for(
    levels: list[tuple[float, int, int]], tallies: Tallies
) -> tuple[list[list[tuple[int, int]]], list[float]]:
    """Every tally's conversions as they must have been, and each step's phase against the conversions' raster [ms].

    Fails on the first tally whose counts are those of no whole or split level.
    """
    codes = [(code(forward), code(reflected)) for _, forward, reflected in levels]
    at, pairs, phases = 0, [], []
    for number, counts in enumerate(zip(tallies.forward, tallies.reflected, strict=True)):
        found = codes_of_a_tally(codes[at], codes[at], 0)
        if sums(found) != counts:
            splits = [codes_of_a_tally(codes[at], codes[at + 1], split) for split in range(2 * SUMMED)]
            fitting = [split for split, one in enumerate(splits) if sums(one) == counts]
            assert len(fitting) == 1, f"tally {number}: {counts} between {codes[at]} and {codes[at + 1]}"
            at, found = at + 1, splits[fitting[0]]
            phases.append(levels[at][0] - PERIOD_MS * number - SLOT_MS * fitting[0])
        pairs.append(found)
    assert at == len(levels) - 1, f"only {at} of {len(levels) - 1} steps were seen"
    return pairs, phases


def test_run_of_the_chip_loses_and_damages_nothing() -> None:
    """Of 40 s of frames every one is sound, none is lost by seq, and the tallies are exactly 10 ms apart."""
    _, data = long_run()
    items, receiver = received(data)
    tallies, counters = tallies_of(items), receiver.counters
    assert len(tallies) >= 3000
    assert (counters.bad_crc, counters.malformed, counters.bad_lines, counters.lost, counters.dropped_flag) == (0,) * 5
    assert [seq for seq, _, _ in in_order(items)] == [n % 256 for n in range(len(in_order(items)))]
    assert set(np.diff(tallies.ms.astype(np.int64)).tolist()) == {PERIOD_MS}


def test_counts_are_those_of_the_injected_voltages() -> None:
    """Each tally is the sum of 16 floor(mV * 1023 / Vref) a channel, in the order F R R F across every step."""
    levels, data = long_run()
    tallies = tallies_of(received(data)[0])
    pairs, phases = account_for(levels, tallies)
    assert len(phases) > 100
    assert len(pairs) == len(tallies)


def test_conversions_keep_an_even_raster() -> None:
    """Over 40 s all steps fall into one slot's width of a raster of 0.3125 ms: neither drift nor jitter over 10 us."""
    levels, data = long_run()
    _, phases = account_for(levels, tallies_of(received(data)[0]))
    assert max(phases) - min(phases) < SLOT_MS + 0.010


def test_crests_hold_the_mean_and_the_highest_pair() -> None:
    """A crest covers ten tallies: rounded mean of their sums; highest forward conversion and its neighbour x 16."""
    levels, data = long_run()
    items, _ = received(data)
    tallies = tallies_of(items)
    pairs, _ = account_for(levels, tallies)
    crests = only(Crest, items)
    assert len(crests) == len(tallies) // 10
    for number, crest in enumerate(crests):
        ten = [pair for tally in pairs[10 * number : 10 * number + 10] for pair in tally]
        forward, reflected = sums(ten)
        top = max(pair[0] for pair in ten)
        beside = [pair[1] for pair in ten if pair[0] == top]
        assert (crest.ms, crest.conversions, crest.flags) == (int(tallies.ms[10 * number + 9]), 160, 0)
        assert (crest.forward_mean, crest.reflected_mean) == ((forward + 5) // 10, (reflected + 5) // 10)
        assert (crest.forward_crest, crest.reflected_at_crest) == (16 * top, 16 * beside[-1])


def test_first_byte_is_a_lone_delimiter_and_the_first_frame_a_nameplate() -> None:
    """After a start comes 00, then who the bridge is."""
    _, data = long_run()
    items, receiver = received(data)
    assert data[0] == 0
    assert receiver.counters.lone_zeros == 1
    assert items[0] == Nameplate(
        seq=0,
        ms=PERIOD_MS,
        minor=0,
        boot=1,
        device_id=0,
        period_ms=PERIOD_MS,
        summed=SUMMED,
        full_scale=SUMMED * FULL_CODE,
        reference_mv=1100,
        features=3,
        bridge_file_id=0,
        firmware_version=1,
        name="my bridge",
    )


def test_nameplates_come_thrice_in_the_first_second_then_every_two() -> None:
    """By device time."""
    times = [plate.ms for plate in only(Nameplate, received(long_run()[1])[0])]
    assert len([ms for ms in times if ms < 1000]) == 3
    assert {b - a for a, b in itertools.pairwise(times[2:])} == {2000}


def test_remark_tells_once_that_power_was_applied() -> None:
    """Behind the first nameplate comes the cause of the start, and no other remark in 40 s."""
    items, _ = received(long_run()[1])
    assert items[1] == Remark(seq=1, ms=PERIOD_MS, code=0x02, argument=0, text="")
    assert len(only(Remark, items)) == 1


def test_conditions_come_at_once_and_every_ten_seconds() -> None:
    """By device time, with what the board was told and the supply not known."""
    conditions = only(Conditions, received(long_run()[1])[0])
    assert [(one.ms, one.temperature_c100, one.supply_mv, one.frequency_hz) for one in conditions] == [
        (PERIOD_MS + 10_000 * n, -525, 0, 14_100_000) for n in range(4)
    ]


def test_conditions_of_a_board_that_knows_nothing_say_so() -> None:
    """Asked for without a value, they tell temperature, supply and frequency as not known."""
    with Board(firmware=avr_elf("CONDITIONS_S=1"), stop_after_ms=200) as board:
        items, _ = received(board.read_to_end())
    assert only(Conditions, items) == [Conditions(2, PERIOD_MS, TEMPERATURE_UNKNOWN, 0, 0)]


def test_example_as_shipped_sends_no_conditions() -> None:
    """It knows none of them: no frame comes, and the nameplate promises none."""
    with Board(stop_after_ms=1500) as board:
        items, _ = received(board.read_to_end())
    assert only(Conditions, items) == []
    assert [plate.features for plate in only(Nameplate, items)] == [1] * 3


@pytest.mark.parametrize(
    ("noted", "remark"),
    [
        (POWER_ON, 0x02),
        (POWER_ON | RESET_PIN | BROWN_OUT, 0x02),
        (RESET_PIN, 0x03),
        (BROWN_OUT, 0x04),
        (WATCHDOG, 0x05),
        (0, 0x01),
    ],
)
def test_remark_tells_what_the_chip_noted_of_its_start(noted: int, remark: int) -> None:
    """Each cause has its code; power comes before what goes with it, and a note wiped out is not known."""
    with Board(cause=noted, stop_after_ms=150) as board:
        items, _ = received(board.read_to_end())
    assert [one.code for one in only(Remark, items)] == [remark]


def test_bridge_starts_again_when_its_watchdog_strikes() -> None:
    """A watchdog set and never fed strikes and runs on: each start ends it, says it, and forgets it."""
    strike = "TEMPERATURE_C100=({ wdt_enable(WDTO_15MS); 0; })"
    with Board(firmware=avr_elf("CONDITIONS_S=1", strike), stop_after_ms=300) as board:
        items, _ = received(board.read_to_end())
    codes = [one.code for one in only(Remark, items)]
    assert len(codes) >= 3
    assert codes == [0x02] + [0x05] * (len(codes) - 1)


def test_clipped_conversions_are_flagged_by_channel() -> None:
    """One conversion at the top code flags its channel in that tally and in the crest over it, and no other."""
    levels = [(0, 500, 50), (500, 1200, 50), (503, 500, 50), (800, 500, 1100), (1100, 500, 1098)]
    with Board(levels, stop_after_ms=1500) as board:
        items, _ = received(board.read_to_end())
    tallies = tallies_of(items)
    flags = tallies.flags.tolist()
    # 3 ms fall into one tally or two, 300 ms into 30 or 31.
    assert flags.count(FLAG_FORWARD_CLIPPED) in (1, 2)
    assert flags.count(FLAG_REFLECTED_CLIPPED) in (30, 31)
    assert set(flags) == {0, FLAG_FORWARD_CLIPPED, FLAG_REFLECTED_CLIPPED}
    assert tallies.reflected.max() == SUMMED * FULL_CODE
    crests = only(Crest, items)
    tens = [set(flags[10 * n : 10 * n + 10]) for n in range(len(crests))]
    assert [crest.flags for crest in crests] == [functools.reduce(int.__or__, ten) for ten in tens]


def test_reset_starts_afresh_with_another_boot() -> None:
    """After a reset: a delimiter, a nameplate with the next boot number, ms and seq from the start, nothing lost."""
    with Board(stop_after_ms=3000, reset_after_ms=1503) as board:
        items, receiver = received(board.read_to_end())
    plates = only(Nameplate, items)
    second = [n for n, plate in enumerate(plates) if plate.seq == 0][1]
    assert [plate.boot for plate in plates] == [1] * second + [2] * (len(plates) - second)
    assert plates[second].ms == PERIOD_MS
    assert [remark.code for remark in only(Remark, items)] == [0x02, 0x03]
    assert (receiver.counters.lost, receiver.counters.resets) == (0, 1)


def test_slow_line_drops_whole_frames_and_says_so() -> None:
    """At 9600 baud not all fits: every frame that comes is sound, and the counts after each gap carry the flag."""
    with Board(firmware=avr_elf("BAUD=9600UL"), stop_after_ms=5000) as board:
        items, receiver = received(board.read_to_end())
    assert (receiver.counters.bad_crc, receiver.counters.malformed) == (0, 0)
    assert receiver.counters.lost > 50
    owed, last = False, -1
    for seq, counts, flags in in_order(items):
        owed = owed or seq != (last + 1) % 256
        if counts:
            assert bool(flags & FLAG_DROPPED) == owed
            owed = False
        last = seq


def test_line_runs_at_the_rate_asked_for() -> None:
    """By the chip's own registers the rate is within 2.5 % of 115200 baud."""
    with Board(stop_after_ms=100) as board:
        board.read_to_end()
        assert int(board.heard("baud")[0]) == pytest.approx(115_200, rel=0.025)


def test_choices_reach_the_nameplate() -> None:
    """Other period, other sum, no crests, supply as reference: the nameplate says so and no crest comes."""
    choices = ("PERIOD_MS=20", "SUMMED=32", "CREST_TALLIES=0", "REFERENCE=REFERENCE_SUPPLY", "DEVICE_ID=0x1A2B3C4D")
    with Board([(0, 2500, 100)], firmware=avr_elf(*choices), stop_after_ms=1000) as board:
        items, _ = received(board.read_to_end())
    plate = only(Nameplate, items)[0]
    assert (plate.period_ms, plate.summed, plate.full_scale) == (20, 32, 32 * FULL_CODE)
    assert (plate.features, plate.reference_mv, plate.device_id) == (0, 5000, 0x1A2B3C4D)
    assert only(Crest, items) == []
    assert set(tallies_of(items).forward.tolist()) == {32.0 * (2500 * FULL_CODE // 5000)}


def test_kit_copied_out_builds_with_its_own_make_file(tmp_path: Path) -> None:
    """`make all size` in a copy of the kit gives a hex file, without a warning."""
    if not shutil.which("make"):
        pytest.skip("no make: apt install make")
    write_kit(tmp_path)
    run_tool("make", "-C", tmp_path, "CHOICES=-Werror", "all", "size")
    assert (tmp_path / "bridge.hex").read_text().endswith(":00000001FF\n")
