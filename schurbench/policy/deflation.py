"""Deflation tests: when a subdiagonal entry counts as negligible.

The formulas are evaluated inside the scan (`schurbench.kernels.blocks`), because every entry of the window is judged
after every sweep; this module names them and says what each is for.
"""

from __future__ import annotations

from dataclasses import dataclass

from schurbench.errors import SettingsError

__all__ = ["DEFLATION_TESTS", "DeflationTest", "deflation_test"]


@dataclass(frozen=True, slots=True)
class DeflationTest:
    """A test by name, with the number the scan knows it by.

    Attributes
    ----------
    name : str
    code : int
    text : str
        One line for a person choosing.
    """

    name: str
    code: int
    text: str


DEFLATION_TESTS: dict[str, DeflationTest] = {
    test.name: test
    for test in (
        DeflationTest("neighbour", 0, "below rounding of the two neighbouring diagonal entries"),
        DeflationTest(
            "ahues-tisseur", 1, "neighbour test, and the eigenvalues of the block may not move beyond rounding either"
        ),
        DeflationTest("norm", 2, "below rounding of the norm of H; quick, but small eigenvalues may be lost"),
    )
}


def deflation_test(name: str) -> DeflationTest:
    """Look a test up by name.

    Raises
    ------
    SettingsError
        Unknown name.
    """
    try:
        return DEFLATION_TESTS[name]
    except (KeyError, TypeError):
        raise SettingsError(f"deflation test {name!r} is unknown; choose one of {', '.join(DEFLATION_TESTS)}") from None
