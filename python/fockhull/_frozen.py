"""Objects whose public attributes cannot be replaced, and arrays that cannot be written."""

from typing import Any, TypeVar

import numpy as np
import numpy.typing as npt

_Array = TypeVar("_Array", bound=npt.NDArray[Any])


class Frozen:
    """Refuses to set public attributes, those that are worked out once and kept included."""

    def __setattr__(self, name: str, value: object) -> None:
        if not name.startswith("_"):
            raise AttributeError(f"{type(self).__name__} is immutable: {name} cannot be set")
        super().__setattr__(name, value)


def read_only(array: _Array) -> _Array:
    """Return the array itself, no longer writable."""
    array.flags.writeable = False
    return array


class FrozenArrays:
    """For frozen dataclasses: arrays stay read-only when unpickled."""

    def __setstate__(self, state: dict[str, Any]) -> None:
        vars(self).update(state)
        for value in state.values():
            if isinstance(value, np.ndarray):
                read_only(value)
