"""What a bench gives so far, worked out beside the screen: the fit of its steps, and what to measure next.

One rule: the screen never waits. One thread works on the newest steps; those that were overtaken before it came to
them are passed over, and what it finds carries the steps it was found from.
"""

from __future__ import annotations

import threading
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from calibration.bench import BenchStep

if TYPE_CHECKING:
    from bridgeio.bridge_file import BridgeFile
    from calibration.fit import Fit
    from calibration.next_step import Advice

__all__ = ["BenchMind", "Thought", "think"]


@dataclass(frozen=True, slots=True)
class Thought:
    """What came of `steps`: their fit, or why there is none; advice; whole: nothing is still being worked out."""

    steps: tuple[BenchStep, ...]
    fit: Fit | None = None
    advice: Advice | None = None
    trouble: str = ""
    whole: bool = False


@dataclass(frozen=True, slots=True)
class _Wish:
    sheet: BridgeFile
    wanted_hz: tuple[float, ...]


class BenchMind:
    """A daemon thread that thinks of the newest sheet given to `consider`."""

    def __init__(self, tell: Callable[[Thought], None]) -> None:
        """`tell` is called from the thread, once with the fit and once more with the advice."""
        self._tell = tell
        self._wake = threading.Condition()
        self._wish: _Wish | None = None
        self._stopped = False
        threading.Thread(target=self._work, name="bench-mind", daemon=True).start()

    def consider(self, sheet: BridgeFile, wanted_hz: tuple[float, ...] = ()) -> None:
        """Think of this sheet next, and of nothing older. wanted_hz: bands [Hz] wanted besides those in it."""
        with self._wake:
            self._wish = _Wish(sheet, wanted_hz)
            self._wake.notify()

    def stop(self) -> None:
        """Begin nothing more."""
        with self._wake:
            self._stopped = True
            self._wake.notify()

    def _work(self) -> None:
        while (wish := self._next()) is not None:
            try:
                think(wish.sheet, wish.wanted_hz, self._tell)
            except Exception as error:  # noqa: BLE001  told on the screen; the next step may mend it
                self._tell(
                    Thought(wish.sheet.steps, trouble=f"not worked out ({type(error).__name__}: {error})", whole=True)
                )

    def _next(self) -> _Wish | None:
        with self._wake:
            self._wake.wait_for(lambda: self._stopped or self._wish is not None)
            wish, self._wish = self._wish, None
            return None if self._stopped else wish


def think(sheet: BridgeFile, wanted_hz: tuple[float, ...], tell: Callable[[Thought], None]) -> None:
    """Tell the fit of a sheet as soon as it is there, then the same with the advice."""
    from bridgeio.sheet_fit import advice_of, fit_of
    from calibration.errors import CalibrationError

    found = Thought(sheet.steps)
    try:
        found = replace(found, fit=fit_of(sheet))
        tell(found)
    except CalibrationError as error:
        found = replace(found, trouble=str(error))
    try:
        advice = advice_of(sheet, found.fit, wanted_hz)
    except CalibrationError as error:
        tell(replace(found, trouble=found.trouble or str(error), whole=True))
        return
    tell(replace(found, advice=advice, trouble="" if advice.fixed else found.trouble, whole=True))
