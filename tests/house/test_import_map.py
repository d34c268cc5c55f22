"""The map of the rooms in `src/`: imports run downward only, and only `python` knows Python."""

import re
from pathlib import Path

import pytest

SOURCE = Path(__file__).parents[2] / "src"

FLOORS = (
    {"error", "scalar", "dense", "linear_operator", "memory", "progress", "weights"},
    {"sector"},
    {"operator", "polytope", "eigen"},
    {"density"},
    {"functional"},
    {"python"},
)
FLOOR_OF = {room: floor for floor, rooms in enumerate(FLOORS) for room in rooms}
# rooms of the ground floor may use each other, others on one floor may not
GROUND = 0

FILES = sorted(SOURCE.rglob("*.rs"))


def room_of(file: Path) -> str:
    """Name the room that a file belongs to."""
    return file.relative_to(SOURCE).parts[0].removesuffix(".rs")


def imports_of(text: str) -> set[str]:
    """Collect the rooms that a file names as `crate::room`, in braces or alone."""
    code = re.sub(r"//.*", "", text)
    rooms = set(re.findall(r"\bcrate::(\w+)", code))
    for group in re.findall(r"\bcrate::\{([^}]*)\}", code):
        rooms |= set(re.findall(r"(?:^|,)\s*(\w+)", group))
    return rooms & FLOOR_OF.keys()


def test_every_room_has_a_floor() -> None:
    rooms = {room_of(file) for file in FILES} - {"lib"}
    assert rooms <= FLOOR_OF.keys()


@pytest.mark.parametrize("file", FILES, ids=lambda f: str(f.relative_to(SOURCE)))
def test_imports_run_downward(file: Path) -> None:
    room = room_of(file)
    if room == "lib":
        return
    floor = FLOOR_OF[room]
    for imported in imports_of(file.read_text()) - {room}:
        below = FLOOR_OF[imported] < floor
        assert below or floor == FLOOR_OF[imported] == GROUND, f"{room} imports {imported}"


@pytest.mark.parametrize("file", FILES, ids=lambda f: str(f.relative_to(SOURCE)))
def test_only_the_binding_knows_python(file: Path) -> None:
    names_python = re.search(r"\b(pyo3|numpy)\b", re.sub(r"//.*", "", file.read_text()))
    assert not names_python or room_of(file) == "python"


def test_the_check_sees_imports() -> None:
    assert imports_of("use crate::eigen::x; use crate::{error::Error, sector};") == {
        "eigen",
        "error",
        "sector",
    }
