"""The words a reading carries about itself, as bits so that a million readings stay arrays.

One rule: a bit's place is its name's place in FLAGS; names are only ever appended.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

__all__ = ["FLAGS", "bit", "names"]

#: name -> what it says, in the words shown to people.
FLAGS: dict[str, str] = {
    "no-carrier": "forward is within 4 sd of the dark count: no power to read",
    "below-reading": "reflected is within 3 sd of the dark count: SWR is only bounded from above",
    "over-unity": "more seems to come back than went out: legal near open and short, else check the wiring",
    "clipped": "a detector is at full scale: powers (forward) or SWR (reflected) are lower bounds",
    "swapped": "forward and reflected seem exchanged",
    "uncalibrated": "no calibration fits this board or frequency: counts only",
    "no-temperature": "the box temperature is not known and the calibration spans more than 10 K",
    "interpolated": "between two calibrated bands",
    "band-unknown": "the frequency is not known: the interval covers all calibrated bands",
    "unchecked": "from plain lines, which carry no check against damage",
    "dark-moved": "the dark count has moved from the calibration's zero",
    "stale": "no fresh frame: the last reading is old",
    "simulated": "from the simulated bridge",
}

_BITS = {name: 1 << place for place, name in enumerate(FLAGS)}


def bit(name: str) -> int:
    """Return the bit of flag `name`. KeyError for a name that is not in FLAGS."""
    return _BITS[name]


def names(bits: int | np.integer | npt.NDArray[np.unsignedinteger]) -> tuple[str, ...]:
    """Return the flag names set in `bits` (a single value), in FLAGS' order."""
    value = int(bits)
    return tuple(name for name, mask in _BITS.items() if value & mask)
