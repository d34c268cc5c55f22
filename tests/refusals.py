"""Tables of bad input: what is refused, with which error, in which words."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
import pytest

from fockhull.errors import ArgumentError, ArgumentIndexError, ArgumentTypeError, FockhullError

VALUE, TYPE, INDEX = ArgumentError, ArgumentTypeError, ArgumentIndexError

BUILT_IN = {VALUE: (ValueError,), TYPE: (TypeError,), INDEX: (ValueError, IndexError)}

Refusal = (
    tuple[type[FockhullError], str, Callable[[], object]]
    | tuple[type[FockhullError], str, Callable[[], object], str]
)

NOT_REAL_NUMBERS: dict[str, Any] = {
    "string": "many",
    "strings": ["a", "b"],
    "booleans": [True, False],
    "objects": np.array([1.0, None], dtype=object),
    "dates": np.array(["2031-05-01", "2031-05-02"], dtype="datetime64[D]"),
    "ragged": [[1.0], [2.0, 3.0]],
    "complex": [1.0 + 1.0j, 2.0],
}
"""Refused with a TypeError wherever real numbers are needed; all but the last anywhere."""

NOT_NUMBERS = {name: value for name, value in NOT_REAL_NUMBERS.items() if name != "complex"}

NOT_INTEGERS: dict[str, Any] = {
    "float": 1.0,
    "string": "1",
    "boolean": True,
    "none": None,
    "complex": 1.0 + 0.0j,
    "list": [1],
}
"""Refused with a TypeError wherever one integer is needed."""


def named(refusals: Sequence[Refusal]) -> Any:
    """Decorate a test of (error, argument, call, words) with the rows of a table."""
    rows = [(*row, "")[:4] for row in refusals]
    ids = [f"{argument}-{k}" for k, (_, argument, _, _) in enumerate(rows)]
    return pytest.mark.parametrize(("error", "argument", "call", "words"), rows, ids=ids)


def refused(
    error: type[FockhullError], argument: str, call: Callable[[], object], words: str = ""
) -> None:
    """Check the class of the error, and that it names the argument, the given, the expected."""
    with pytest.raises(FockhullError) as caught:
        call()
    assert type(caught.value) is error
    assert isinstance(caught.value, BUILT_IN[error])
    message = str(caught.value)
    assert re.match(rf"`{argument}`: got \S.*; expected \S.*", message), message
    assert words in message
