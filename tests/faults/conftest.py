"""What the fault tests share: a board that never stops, and a line of figures for whoever runs them."""

from collections.abc import Callable, Iterator

import pytest

from tests.faults.board import SteadyBoard


@pytest.fixture
def board() -> Iterator[SteadyBoard]:
    """A bridge that sends a thousand tallies a second."""
    with SteadyBoard() as steady:
        yield steady


@pytest.fixture
def report(capsys: pytest.CaptureFixture[str]) -> Callable[[str], None]:
    """Prints a line past pytest's capture."""

    def tell(line: str) -> None:
        with capsys.disabled():
            print(f"\n{line}")

    return tell
