"""Rows of the fault matrix, each printed at the end of the run by the test that measured it."""

from collections.abc import Callable

Figure = Callable[[str, str], None]


def report(figure: Figure, number: int, fault: str, expected: str, measured: str) -> None:
    """
    Report one row.

    Args:
        figure: the fixture of that name.

        number: of the row.

        fault: what was done to the node.

        expected: what has to be shown.

        measured: what was.
    """
    figure(f"fault {number}, {fault}", f"{measured} (expected {expected})")
