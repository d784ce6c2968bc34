"""A process that writes given bytes at given moments, so that the sending costs the measured process nothing.

One rule: standard library only, so that it is up at once. A job on standard input is a line of JSON {"at": seconds
from now, "sizes": bytes of each piece} and then the bytes; the answer is a line of JSON with the moments [s,
CLOCK_MONOTONIC] at which the pieces were written.
"""

import json
import os
import sys
import time


def main() -> None:
    """Serve jobs until standard input ends; the file descriptor to write to is the first argument."""
    fd = int(sys.argv[1])
    while head := sys.stdin.buffer.readline():
        job = json.loads(head)
        data = memoryview(sys.stdin.buffer.read(sum(job["sizes"])))
        print(json.dumps(_write(fd, job["at"], job["sizes"], data)), flush=True)


def _write(fd: int, at: list[float], sizes: list[int], data: memoryview) -> list[float]:
    written, start_s, done = [], time.monotonic(), 0
    for due_s, size in zip(at, sizes, strict=True):
        wait_s = start_s + due_s - time.monotonic()
        if wait_s > 0.0:
            time.sleep(wait_s)
        written.append(time.monotonic())
        piece, done = data[done : done + size], done + size
        while piece:
            piece = piece[os.write(fd, piece) :]
    return written


if __name__ == "__main__":
    main()
