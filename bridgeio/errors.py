"""What floor 1 raises. A message says what came, what was wanted and what to do; it may hold outside text, raw."""

__all__ = ["BridgeIOError", "EndOfSource", "FileError", "JournalHeld", "LinkError"]


class BridgeIOError(Exception):
    """Base of all errors raised by the bridgeio package."""


class LinkError(BridgeIOError):
    """A port or link could not be opened, or was lost. The command line leaves with exit code 4."""


class EndOfSource(BridgeIOError):
    """A file or a bounded simulation has no more to give; not a fault."""


class JournalHeld(BridgeIOError):
    """Another program, or this one, writes the journal already. The command line leaves with exit code 6."""


class FileError(BridgeIOError):
    """A file is missing, unreadable or wrong, in one or more faults, an argument each. The exit code is 3."""

    def __str__(self) -> str:
        """All faults, a line each; who shows them takes `args`, as a fault may hold a line end from outside."""
        return "\n".join(map(str, self.args))
