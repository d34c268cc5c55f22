"""What makes two sweeps the same: task, grid, options and package version."""

import functools
import hashlib
import inspect
import io
import tokenize
from collections.abc import Callable, Iterator
from dataclasses import asdict, dataclass
from importlib import metadata
from typing import Any

import numpy as np

from fockhull.sweeps import grid as grids

_IGNORED_TOKENS = frozenset({tokenize.COMMENT, tokenize.NL, tokenize.ENCODING})


@dataclass(frozen=True)
class Identity:
    """Identity of a sweep, kept in its store."""

    task: str
    source: str
    version: str | None
    package: str
    options: dict[str, Any]
    grid: dict[str, Any]

    @classmethod
    def of(
        cls,
        task: Callable[..., Any],
        grid: grids.Grid,
        version: str | None,
        options: dict[str, Any],
    ) -> "Identity":
        """Return the identity of a sweep of `task` over `grid`."""
        return cls(
            qualified_name(task), source_hash(task), version, _package(), options, grid.describe()
        )

    def as_json(self) -> dict[str, Any]:
        """Return the identity as JSON-able data."""
        return asdict(self)

    def differences(self, stored: dict[str, Any]) -> list[str]:
        """Say in words where this sweep differs from the one stored."""
        names = {
            "task": "the task",
            "source": "the hash of the task's source and constants",
            "version": "version=",
            "package": "the version of fockhull",
        }
        mine = self.as_json()
        found = [
            f"{words} is {mine[key]}, the stored one {stored[key]}"
            for key, words in names.items()
            if mine[key] != stored[key]
        ]
        found += [
            f"{key}= is {value}, the stored one {stored['options'].get(key)}"
            for key, value in self.options.items()
            if value != stored["options"].get(key)
        ]
        return found + list(grids.differences(stored["grid"], self.grid))


def qualified_name(task: Callable[..., Any]) -> str:
    """Return module and qualified name of a function, a partial or a callable object."""
    if isinstance(task, functools.partial):
        return qualified_name(task.func)
    named = task if hasattr(task, "__qualname__") else type(task)
    return f"{named.__module__}.{named.__qualname__}"


def source_hash(task: Callable[..., Any]) -> str:
    """Return a hash of the task's source and of the constants it is bound to.

    Comments and blank lines do not count. Functions of the same module that
    the task calls, module constants it reads, defaults, closures and the
    arguments of a partial count, as far as they are functions, numbers,
    strings, arrays or tuples of them. Lists count as arguments of a partial
    only: elsewhere they may be something the task appends to.
    """
    digest = hashlib.sha256()
    for part in _parts(task, set()):
        digest.update(part.encode() + b"\0")
    return digest.hexdigest()[:16]


def _parts(value: Any, seen: set[int]) -> Iterator[str]:
    """Yield texts that change when `value` changes."""
    if isinstance(value, bool | int | float | complex | str | bytes | np.generic | None):
        yield repr(value)
    elif isinstance(value, np.ndarray):
        yield f"array {value.dtype} {value.shape} {hashlib.sha256(value.tobytes()).hexdigest()}"
    elif isinstance(value, tuple):
        for item in value:
            yield from _parts(item, seen)
    elif id(value) in seen:
        return
    elif isinstance(value, functools.partial):
        seen.add(id(value))
        yield from _parts(value.func, seen)
        for name, bound in [*enumerate(value.args), *sorted(value.keywords.items())]:
            yield str(name)
            yield from _parts(tuple(bound) if isinstance(bound, list) else bound, seen)
    elif inspect.isfunction(value):
        seen.add(id(value))
        yield from _function_parts(value, seen)
    elif inspect.ismethod(value):
        yield from _parts(value.__func__, seen)
    elif callable(value) and not inspect.isbuiltin(value):
        seen.add(id(value))
        yield _source(value if inspect.isclass(value) else type(value))


def _function_parts(function: Any, seen: set[int]) -> Iterator[str]:
    yield _source(function)
    yield from _parts(function.__defaults__ or (), seen)
    for name, default in sorted((function.__kwdefaults__ or {}).items()):
        yield name
        yield from _parts(default, seen)
    bound = inspect.getclosurevars(inspect.unwrap(function))
    for name, value in sorted(({**bound.nonlocals, **bound.globals}).items()):
        foreign = callable(value) and getattr(value, "__module__", None) != function.__module__
        if not foreign:
            yield name
            yield from _parts(value, seen)


def _source(code: Any) -> str:
    try:
        text = inspect.getsource(code)
    except (OSError, TypeError):
        return _compiled(getattr(code, "__code__", None))
    try:
        tokens = list(tokenize.generate_tokens(io.StringIO(inspect.cleandoc(text)).readline))
    except (tokenize.TokenError, SyntaxError):
        return text.strip()
    return " ".join(token.string for token in tokens if token.type not in _IGNORED_TOKENS)


def _compiled(code: Any) -> str:
    """Return a stand-in for a source that cannot be read, as in an interactive session."""
    if code is None:
        return ""
    constants = [_compiled(c) if hasattr(c, "co_code") else repr(c) for c in code.co_consts]
    return f"{code.co_code.hex()} {code.co_names} {constants}"


def _package() -> str:
    try:
        return metadata.version("fockhull")
    except metadata.PackageNotFoundError:
        return "not installed"
