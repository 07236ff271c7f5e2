"""The house stands as it was drawn: rooms in order, a pure core, one idea a module."""

from __future__ import annotations

import ast
import functools
import sys
from collections.abc import Iterator
from pathlib import Path

import mwdlink

HOME = Path(mwdlink.__file__).parent
# from the ground up; a room imports only rooms to its left
ROOMS = (
    "ground",
    "chains",
    "relaxation",
    "measurement",
    "inversion",
    "decisions",
    "files",
    "figures",
    "report",
    "runs",
    "cli",
)
GROUND = {"errors", "quantity", "result"}
PURE = {"chains", "relaxation", "inversion"}
THIRD_PARTY = {"numpy", "scipy", "pandas", "matplotlib", "click"}
LONG = 500
TOO_LONG = 700


def modules() -> list[Path]:
    return sorted(p for p in HOME.rglob("*.py") if p.name not in ("__main__.py",))


def room_of(path: Path) -> str | None:
    """Room of a module; None for the package's own `__init__`, which names every room lazily."""
    parts = path.relative_to(HOME).parts
    if len(parts) == 1:
        stem = parts[0].removesuffix(".py")
        return None if stem == "__init__" else "ground" if stem in GROUND else "?"
    return parts[0]


def imports(tree: ast.AST, path: Path, top_only: bool = False) -> Iterator[tuple[int, str]]:
    """(line, dotted name) of every import, those in functions too; not those for type checkers."""
    for node in ast.iter_child_nodes(tree):
        if isinstance(node, ast.If) and "TYPE_CHECKING" in ast.dump(node.test):
            continue
        if isinstance(node, ast.Import):
            yield from ((node.lineno, alias.name) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = node.module or ""
            if node.level:
                package = ("mwdlink", *path.relative_to(HOME).parts[:-1])
                base = ".".join([*package[: len(package) - node.level + 1], *filter(None, [base])])
            yield from ((node.lineno, f"{base}.{alias.name}") for alias in node.names)
        elif not (top_only and isinstance(node, (ast.FunctionDef, ast.AsyncFunctionDef))):
            yield from imports(node, path, top_only)


@functools.cache
def parsed() -> tuple[tuple[Path, ast.AST], ...]:
    return tuple((path, ast.parse(path.read_text(encoding="utf-8"))) for path in modules())


def test_rooms_in_order() -> None:
    """Compared with the list of rooms in DEVELOPERS.md: no import reaches upwards."""
    wrong = []
    for path, tree in parsed():
        room = room_of(path)
        if room is None:
            continue
        if room not in ROOMS:
            wrong.append(f"{path.relative_to(HOME)}: not in any room")
            continue
        for line, name in imports(tree, path):
            parts = name.split(".")
            if parts[0] != "mwdlink" or len(parts) < 2:
                continue
            target = "ground" if parts[1] in (*GROUND, "__version__") else parts[1]
            if target in ROOMS and ROOMS.index(target) > ROOMS.index(room):
                wrong.append(f"{path.relative_to(HOME)}:{line}: {room} imports {name}")
    assert not wrong, "\n".join(wrong)


def test_core_is_pure() -> None:
    """DEVELOPERS.md: chains, relaxation, inversion load numpy and scipy only (pandas late)."""
    wrong = []
    for path, tree in parsed():
        if room_of(path) not in PURE:
            continue
        for top_only, allowed in (
            (True, {"numpy", "scipy"}),
            (False, {"numpy", "scipy", "pandas"}),
        ):
            for line, name in imports(tree, path, top_only):
                first = name.split(".")[0]
                outside = first not in sys.stdlib_module_names and first != "mwdlink"
                if outside and first not in allowed:
                    wrong.append(f"{path.relative_to(HOME)}:{line}: {name}")
    assert not wrong, "\n".join(wrong)


def test_only_declared_dependencies() -> None:
    """pyproject.toml: nothing is imported that an install does not bring (optional ones late)."""
    wrong = []
    for path, tree in parsed():
        for line, name in imports(tree, path, top_only=True):
            first = name.split(".")[0]
            if first not in sys.stdlib_module_names | THIRD_PARTY | {"mwdlink"}:
                wrong.append(f"{path.relative_to(HOME)}:{line}: {name}")
    assert not wrong, "\n".join(wrong)


def test_commands_are_light() -> None:
    """DEVELOPERS.md: what the command line loads before a command runs is click alone."""
    wrong = []
    for path, tree in parsed():
        light = room_of(path) == "cli" or path.name in ("errors.py", "results.py")
        if not light:
            continue
        for line, name in imports(tree, path, top_only=True):
            if name.split(".")[0] in THIRD_PARTY - {"click"}:
                wrong.append(f"{path.relative_to(HOME)}:{line}: {name}")
    assert not wrong, "\n".join(wrong)


def narrows(test: ast.expr) -> bool:
    """True for ``name is not None``."""
    return (
        isinstance(test, ast.Compare)
        and isinstance(test.left, ast.Name | ast.Attribute)
        and isinstance(test.ops[0], ast.IsNot)
        and isinstance(test.comparators[0], ast.Constant)
        and test.comparators[0].value is None
    )


def test_no_assert_no_print_no_global_pyplot() -> None:
    """DEVELOPERS.md: no assert and no print for users, no pyplot state.

    ``assert name is not None`` passes: it tells the type checker what the code before it made sure.
    """
    wrong = []
    for path, tree in parsed():
        for node in ast.walk(tree):
            if isinstance(node, ast.Assert) and not narrows(node.test):
                wrong.append(f"{path.relative_to(HOME)}:{node.lineno}: assert")
            if isinstance(node, ast.Call) and getattr(node.func, "id", "") == "print":
                wrong.append(f"{path.relative_to(HOME)}:{node.lineno}: print")
        for line, name in imports(tree, path):
            if name.startswith("matplotlib.pyplot"):
                wrong.append(f"{path.relative_to(HOME)}:{line}: pyplot")
    assert not wrong, "\n".join(wrong)


def test_modules_are_short() -> None:
    """DEVELOPERS.md: a module past 500 lines is usually two ideas: reported; past 700: refused."""
    lengths = {p: len(p.read_text(encoding="utf-8").splitlines()) for p in modules()}
    longest = sorted(lengths, key=lengths.get, reverse=True)[:5]  # type: ignore[arg-type]
    for path in [p for p in lengths if lengths[p] > LONG] or longest:
        print(f"{lengths[path]:5d} {path.relative_to(HOME)}")
    assert lengths[longest[0]] <= TOO_LONG, f"{longest[0]} has {lengths[longest[0]]} lines"
