"""Bytes of a port to counts: what a frame costs, and what a stream of a megabyte a second costs."""

from __future__ import annotations

import time
from functools import partial

import serial

from bridgeio.frames import Item, Tallies
from bridgeio.ports import DeviceSource
from bridgeio.receiver import Receiver

from . import counts
from .cost import Figure, Sizes, in_turn, median
from .line import Line
from .programs import Program, script, until

__all__ = ["measure"]

#: Pieces in which a driver hands on what has come; a terminal's buffer holds four of them.
_PIECE_BYTES = 1024
_MEGABYTE = 1e6
_FRAME_BYTES = 15


def measure(sizes: Sizes) -> list[Figure]:
    """Frames per CPU second against pyserial's readline, and the share of a core at 1 MB/s."""
    with Line() as line:
        rates = in_turn(sizes.rounds, partial(_frames_rate, line, sizes), partial(_lines_rate, line, sizes))
    ours, default = median(rates[0]), median(rates[1])
    share = median(in_turn(sizes.rounds, partial(_stream_share, sizes))[0])
    return [
        Figure(
            "receive",
            "port read and Receiver.feed, binary frames",
            "pyserial readline, split, int",
            "frames per CPU second",
            ours,
            default,
            ours / default,
            100.0,
            at_least=True,
        ),
        Figure(
            "receive 1 MB/s",
            "Link with DeviceSource and Receiver, fed 1 MB/s",
            "none",
            "% of a core",
            share,
            float("nan"),
            share,
            12.0,
            "% of a core",
            more={"frames per second": _MEGABYTE / _FRAME_BYTES},
        ),
    ]


def _frames_rate(line: Line, sizes: Sizes) -> float:
    frames = counts.frames(counts.turning(sizes.frames))
    source, receiver = DeviceSource(line.path), Receiver()
    source.open()
    line.feed([b"".join(frames)], [0.0])
    begun_s, found = time.process_time(), 0
    while found < sizes.frames:
        found += _tallies(receiver.feed(source.read()))
    used_s = time.process_time() - begun_s
    source.close()
    line.fed()
    return found / used_s


def _tallies(items: list[Item]) -> int:
    return sum(len(item) for item in items if isinstance(item, Tallies))


def _lines_rate(line: Line, sizes: Sizes) -> float:
    text = counts.lines(counts.turning(sizes.lines))
    with serial.Serial(line.path, 115200) as port:
        line.feed([b"".join(text)], [0.0])
        begun_s = time.process_time()
        for _ in text:
            _forward, _reflected = (int(word) for word in port.readline().split())
        used_s = time.process_time() - begun_s
    line.fed()
    return sizes.lines / used_s


def _stream_share(sizes: Sizes) -> float:
    """Share of a core [%] of a process that receives a megabyte a second."""
    frames = counts.frames(counts.turning(int(sizes.stream_s * _MEGABYTE / _FRAME_BYTES)))
    data = b"".join(frames)
    pieces = [data[at : at + _PIECE_BYTES] for at in range(0, len(data), _PIECE_BYTES)]
    with Line() as line, Program(script("listening", line.path, str(len(frames)))) as program:
        until(lambda: b"open\n" in program.text(), "an open port")
        begun_s, begun_cpu_s = time.monotonic(), program.cpu_s
        line.feed_evenly(pieces, _MEGABYTE / _PIECE_BYTES)
        line.fed()
        until(lambda: program.text().endswith(b"%d\n" % len(frames)), "the last frame", 5.0)
        return 100.0 * (program.cpu_s - begun_cpu_s) / (time.monotonic() - begun_s)
