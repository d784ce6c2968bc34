"""Floor 0: from counts to a reading, as pure arithmetic. No file, port, clock, thread or print."""

__version__ = "0.1.0"
