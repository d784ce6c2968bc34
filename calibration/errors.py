"""What floor 0 raises. A message says what came, what was wanted and what to do."""

__all__ = ["CalibrationError", "SheetError", "UnitError"]


class CalibrationError(Exception):
    """Base of all errors raised by the calibration package."""


class UnitError(CalibrationError, ValueError):
    """A text could not be read as a frequency, a load or a line."""


class SheetError(CalibrationError):
    """A bench sheet cannot carry the fit that was asked of it."""
