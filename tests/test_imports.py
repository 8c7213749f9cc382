"""The arrows of docs/architecture.md, read from the source by its syntax tree."""

from __future__ import annotations

import ast
import re
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

import leakpipe

ROOT = Path(leakpipe.__file__).parent
PAGE = ROOT.parent / "docs" / "architecture.md"
STAGES = ("readout", "detection", "rates", "logical", "share")

ROWS: tuple[tuple[str, ...], ...] = (
    ("__main__",),
    ("cli",),
    ("console", "preview", "refit"),
    ("pipeline",),
    ("reuse", "result"),
    ("reduction",),
    ("history",),
    ("report",),
    ("share",),
    ("readout", "detection", "rates", "logical"),
    ("rehearsal",),
    ("recordings",),
    ("codes",),
    ("config",),
    ("estimates", "findings", "errors", "progress"),
)
"""Rooms from top to bottom: a room imports itself and rooms of lower rows."""

EXCEPTIONS = {("share", "logical"): {"leakpipe.logical.per_round"}}
"""What one stage may take from another: the fit that both give the same meaning."""

LABELLED_HELPERS = {
    "readout/counting.py",
    "readout/model.py",
    "readout/tuning.py",
    "rates/curves.py",
    "rates/doubts.py",
    "rates/jointly.py",
    "rates/reported.py",
    "rates/roles.py",
    "rates/shapes.py",
    "rates/transport.py",
    "share/inputs.py",
}
"""Modules beside a `stage.py` that work on its labelled datasets, as the architecture page says."""
CORE_LIBRARIES = {"numpy", "scipy", "numba"}
NAMED_LIBRARIES = {"readout/weights.py": {"sklearn"}, "rates/joint.py": {"lmfit"}}
CORE_OF_LEAKPIPE = (
    "leakpipe.codes",
    "leakpipe.estimates",
    "leakpipe.findings",
    "leakpipe.errors",
    "leakpipe.recordings.shots",
)
"""Parts of leakpipe that are plain values and arrays themselves."""
LEFT_TO_SHARE = "leakpipe.rehearsal"
"""The core of share runs the twin, the one place where a stage meets the rehearsal."""


def modules() -> list[Path]:
    return sorted(ROOT.rglob("*.py"))


def room_of(path: Path) -> str:
    return path.relative_to(ROOT).with_suffix("").parts[0]


def imports_of(path: Path) -> Iterator[tuple[int, str]]:
    """Give the line and full name of everything a file imports, also inside functions."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from ((node.lineno, alias.name) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}:{node.lineno}: imports are written in full"
            module = node.module or ""
            for alias in node.names:
                inner = ROOT.parent / Path(*module.split("."), alias.name)
                is_module = inner.is_dir() or inner.with_suffix(".py").is_file()
                yield node.lineno, f"{module}.{alias.name}" if is_module else module


def own_imports(path: Path) -> Iterator[tuple[int, str]]:
    """Give the imports of leakpipe's own rooms; the bare package holds the version only."""
    for line, name in imports_of(path):
        if name.startswith("leakpipe."):
            yield line, name


def row_of(room: str) -> int:
    return next(index for index, row in enumerate(ROWS) if room in row)


def core_modules() -> list[Path]:
    return [
        path
        for path in modules()
        if room_of(path) in STAGES
        and path.name not in ("stage.py", "__init__.py")
        and path.relative_to(ROOT).as_posix() not in LABELLED_HELPERS
    ]


def broken(rule: str, found: list[str]) -> None:
    assert not found, f"{rule}:\n" + "\n".join(found)


def test_every_room_has_a_row() -> None:
    """A new room is put into a row, here and on the architecture page, before it is used."""
    rooms = {room_of(path) for path in modules()} - {"__init__"}
    assert rooms == {room for row in ROWS for room in row}


def test_the_architecture_page_draws_the_same_rooms_in_the_same_order() -> None:
    """The diagram people read names every room, in the order that the arrows are held in."""
    diagram = re.search(r"```\n(.*?)```", PAGE.read_text(encoding="utf-8"), re.DOTALL)
    assert diagram is not None
    lines = [line for line in diagram[1].splitlines() if line.strip()]
    columns = [re.split(r" {3,}", line)[0].split() for line in lines]
    rows = [row for row in columns if row]
    assert [set(row) for row in rows] == [set(row) for row in ROWS if row != ("__main__",)]


def test_imports_point_down() -> None:
    """A room imports only itself, rooms of lower rows, and the one named exception."""
    found = []
    for path in modules():
        room = room_of(path)
        if room == "__init__":
            continue
        for line, name in own_imports(path):
            target = name.split(".")[1]
            lower = row_of(room) < row_of(target)
            if target != room and not lower:
                found.append(f"{path.relative_to(ROOT)}:{line} imports {name}")
    broken("imports point down only", found)


def test_stages_do_not_import_each_other() -> None:
    """No stage imports another stage's modules, but for the fit that share and logical agree on."""
    found = []
    for path in modules():
        room = room_of(path)
        if room not in STAGES:
            continue
        for line, name in own_imports(path):
            target = name.split(".")[1]
            allowed = name in EXCEPTIONS.get((room, target), set())
            if target in STAGES and target != room and not allowed:
                found.append(f"{path.relative_to(ROOT)}:{line} imports {name}")
    broken("stages never import each other", found)


@pytest.mark.parametrize("stage", ["readout", "detection", "rates", "logical"])
def test_estimating_stages_know_nothing_of_truth_and_pages(stage: str) -> None:
    """The estimating stages share no code with the rehearsal and write nothing for people."""
    found = [
        f"{path.relative_to(ROOT)}:{line} imports {name}"
        for path in modules()
        if room_of(path) == stage
        for line, name in own_imports(path)
        if name.split(".")[1] in ("rehearsal", "report", "history")
    ]
    broken(f"{stage} imports no rehearsal, report or history", found)


def test_the_rehearsal_imports_no_stage() -> None:
    """What makes the truth shares no code with what estimates it."""
    found = [
        f"{path.relative_to(ROOT)}:{line} imports {name}"
        for path in modules()
        if room_of(path) == "rehearsal"
        for line, name in own_imports(path)
        if name.split(".")[1] in (*STAGES, "reduction", "pipeline")
    ]
    broken("rehearsal imports no stage", found)


@pytest.mark.parametrize("path", core_modules(), ids=lambda path: str(path.relative_to(ROOT)))
def test_core_is_plain_arrays(path: Path) -> None:
    """A core module imports numpy, scipy, numba, the standard library and plain values only."""
    name_of_file = path.relative_to(ROOT).as_posix()
    room = room_of(path)
    libraries = CORE_LIBRARIES | NAMED_LIBRARIES.get(name_of_file, set())
    own = (*CORE_OF_LEAKPIPE, f"leakpipe.{room}")
    own += tuple(name for (user, _), names in EXCEPTIONS.items() if user == room for name in names)
    own += (LEFT_TO_SHARE,) if room == "share" else ()
    found = []
    for line, name in imports_of(path):
        top = name.split(".")[0]
        if top == "leakpipe":
            plain = any(name == one or name.startswith(f"{one}.") for one in own)
            file = "/".join(name.split(".")[1:]) + ".py"
            allowed = plain and file not in LABELLED_HELPERS and not name.endswith(".stage")
        else:
            allowed = top in libraries or top in sys.stdlib_module_names
        if not allowed:
            found.append(f"{name_of_file}:{line} imports {name}")
    broken("core modules hold plain arrays", found)


def test_nothing_imports_the_commands() -> None:
    """Only the entry point of `python -m leakpipe` imports the commands."""
    found = [
        f"{path.relative_to(ROOT)}:{line}"
        for path in modules()
        if path.name != "__main__.py"
        for line, name in own_imports(path)
        if name.split(".")[1] == "cli"
    ]
    broken("nothing imports cli", found)


def test_the_package_exports_its_version_only() -> None:
    """`import leakpipe` costs nothing and offers one name."""
    tree = ast.parse((ROOT / "__init__.py").read_text(encoding="utf-8"))
    names = [
        target.id
        for node in tree.body
        if isinstance(node, ast.Assign)
        for target in node.targets
        if isinstance(target, ast.Name)
    ]
    assert set(names) <= {"__version__", "__all__"}
    assert "__version__" in names
    imported = {name for _, name in imports_of(ROOT / "__init__.py")}
    assert imported <= {"__future__"}
