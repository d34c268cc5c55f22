"""The exceptions and warnings of fockhull.

Everything that fockhull raises on purpose derives from `FockhullError`.
Errors of input are also `ValueError` (`TypeError` where the type is wrong,
`IndexError` where an index is out of range), so existing handlers keep working.
"""

from typing import Any

__all__ = [
    "ArgumentError",
    "ArgumentIndexError",
    "ArgumentTypeError",
    "ComputationError",
    "ConvergenceError",
    "CutMultipletWarning",
    "FockhullError",
    "SizeError",
]


class FockhullError(Exception):
    """Root of everything that fockhull raises on purpose."""


class _RefusalError(FockhullError):
    """Says which argument was refused, what came and what is expected."""

    def __init__(self, argument: str, given: object, expected: str) -> None:
        super().__init__(f"`{argument}`: got {given}; expected {expected}")
        self.argument = argument
        self.given = given
        self.expected = expected

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.argument, self.given, self.expected)


class ArgumentError(_RefusalError, ValueError):
    """A value that the function does not accept."""


class ArgumentIndexError(ArgumentError, IndexError):
    """An index out of its range."""


class ArgumentTypeError(_RefusalError, TypeError):
    """An argument of a wrong type."""


class SizeError(FockhullError, ValueError):
    """Work too large for memory or for 64-bit indices, refused before it starts."""


class ComputationError(FockhullError, RuntimeError):
    """A numerical routine failed."""


class ConvergenceError(ComputationError):
    """An iteration stopped before it reached its tolerance.

    Attributes
    ----------
    result
        The partial result, of the same class as the full one, with its residuals.
    """

    def __init__(self, message: str, result: Any = None) -> None:
        super().__init__(message)
        self.result = result

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.args[0], self.result)


class CutMultipletWarning(UserWarning):
    """Unequal weights fall on levels that are degenerate.

    The ensemble energy is unique, the density matrix is not: it depends on the
    choice of states inside the multiplet.
    """
