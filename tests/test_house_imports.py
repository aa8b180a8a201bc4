"""The rooms of the house import downwards only, and the codec stays free of time, threads, files and logging."""

from __future__ import annotations

import ast
import graphlib
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
PROGRAM = ROOT / "runtime" / "ramprig"
CODEC = ROOT / "protocol" / "ramprig_link"

ROOMS_FROM_THE_TOP = [
    *("cli", "shell", "report", "measure", "accept", "endure", "sequence", "record", "session"),
    *("mock", "port", "bench", "yamlfile", "quantity", "cautions", "wrapping", "extras", "errors"),
]

CODEC_MAY_USE = {
    "__future__", "abc", "array", "base64", "binascii", "bisect", "collections", "dataclasses", "enum", "functools",
    "itertools", "math", "operator", "re", "string", "struct", "types", "typing",
}  # fmt: skip
HEAVY = {"numpy", "scipy", "yaml", "serial", "prompt_toolkit", "jsonschema", "matplotlib"}


def module_files(package: Path) -> list[Path]:
    return sorted(package.rglob("*.py"))


def dotted(path: Path) -> str:
    parts = path.relative_to(PROGRAM.parent if PROGRAM in path.parents else CODEC.parent).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def imports_of(node: ast.AST, module: str, *, is_package: bool) -> Iterator[tuple[str, int]]:
    """Every (absolute dotted name, line) that an import statement under `node` names, `from x import y` as `x.y`."""
    for statement in ast.walk(node):
        if isinstance(statement, ast.Import):
            for alias in statement.names:
                yield alias.name, statement.lineno
        elif isinstance(statement, ast.ImportFrom):
            base = statement.module or ""
            if statement.level:
                up = statement.level - (1 if is_package else 0)
                parts = module.split(".")
                base = ".".join([*parts[: len(parts) - up], *([base] if base else [])])
            for alias in statement.names:
                yield f"{base}.{alias.name}", statement.lineno


def room_of(name: str) -> str | None:
    """The room a dotted name lies in; None for what is not in the program or is its bare top."""
    parts = name.split(".")
    if parts[0] != "ramprig" or len(parts) == 1 or parts[1] in ("__version__", "__main__"):
        return None
    return parts[1]


def upward_imports(source: str, module: str, *, is_package: bool) -> list[str]:
    """Each import in `source` that does not run downwards, as one readable line."""
    here = room_of(module)
    if here is None and module != "ramprig":
        return []  # __main__ stands above all rooms
    found = []
    for name, line in imports_of(ast.parse(source), module, is_package=is_package):
        there = room_of(name)
        if there is None or there == here:
            continue
        if there not in ROOMS_FROM_THE_TOP:
            found.append(f"{module}:{line}: {name} is in no known room")
        elif here is None or ROOMS_FROM_THE_TOP.index(there) < ROOMS_FROM_THE_TOP.index(here):
            found.append(f"{module}:{line}: imports {name}, which stands above it")
    return found


def test_imports_between_rooms_run_downwards() -> None:
    wrong = []
    for path in module_files(PROGRAM):
        is_package = path.name == "__init__.py"
        wrong += upward_imports(path.read_text("utf-8"), dotted(path), is_package=is_package)
    assert wrong == []


def test_every_module_of_the_program_is_in_a_known_room() -> None:
    rooms = {room_of(dotted(path)) for path in module_files(PROGRAM)} - {None}
    assert rooms <= set(ROOMS_FROM_THE_TOP)


def without_types(tree: ast.Module) -> ast.Module:
    """The module without what it imports for its types alone."""

    class Cut(ast.NodeTransformer):
        def visit_If(self, node: ast.If) -> ast.AST | None:
            return None if isinstance(node.test, ast.Name) and node.test.id == "TYPE_CHECKING" else node

    cut = Cut().visit(tree)
    assert isinstance(cut, ast.Module)
    return cut


def circle_of(sources: dict[str, str], packages: frozenset[str]) -> list[str] | None:
    """Modules that import one another in a circle, imports within functions included; None where there are none."""
    graph: dict[str, set[str]] = {}
    for module, source in sources.items():
        tree = without_types(ast.parse(source))
        names = {name for name, _ in imports_of(tree, module, is_package=module in packages)}
        graph[module] = {
            one for name in names if (one := name if name in sources else name.rpartition(".")[0]) in sources
        } - {module}
    try:
        graphlib.TopologicalSorter(graph).prepare()
    except graphlib.CycleError as error:
        return list(error.args[1])
    return None


def test_no_modules_import_one_another_in_a_circle() -> None:
    files = [*module_files(PROGRAM), *module_files(CODEC)]
    packages = frozenset(dotted(path) for path in files if path.name == "__init__.py")
    assert circle_of({dotted(path): path.read_text("utf-8") for path in files}, packages) is None


def test_a_circle_is_found() -> None:
    lazy = "def f():\n    from .b import g\n"
    types = "from typing import TYPE_CHECKING\nif TYPE_CHECKING:\n    from .b import g\n"
    for first, round_about in ((lazy, True), (types, False)):
        found = circle_of({"ramprig.a": first, "ramprig.b": "from ramprig.a import f\n"}, frozenset())
        assert (found is not None) is round_about


@pytest.mark.parametrize(
    ("module", "source"),
    [
        ("ramprig.port.base", "from ramprig.mock import Board"),
        ("ramprig.port.base", "from ..mock import Board"),
        ("ramprig.port.base", "import ramprig.session"),
        ("ramprig.mock.board", "def late():\n    from ramprig.session import Session"),
        ("ramprig.errors", "from . import quantity"),
        ("ramprig.port.base", "from ramprig.utils import thing"),
    ],
)
def test_an_upward_import_is_noticed(module: str, source: str) -> None:
    assert len(upward_imports(source, module, is_package=False)) == 1


def test_a_downward_import_is_allowed() -> None:
    source = "from ..errors import LinkLost\nfrom .clock import Clock\nimport ramprig_link\nimport ramprig.quantity"
    assert upward_imports(source, "ramprig.port.base", is_package=False) == []


def forbidden_in_codec(source: str, module: str, *, is_package: bool) -> list[str]:
    tree = ast.parse(source)
    found = [
        f"{module}:{line}: imports {name}"
        for name, line in imports_of(tree, module, is_package=is_package)
        if name.split(".")[0] not in CODEC_MAY_USE | {"ramprig_link"}
    ]
    called = {"open", "print", "input"}
    found += [
        f"{module}:{node.lineno}: calls {node.func.id}()"
        for node in ast.walk(tree)
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id in called
    ]
    return found


def test_the_codec_does_no_input_or_output() -> None:
    wrong = []
    for path in module_files(CODEC):
        is_package = path.name == "__init__.py"
        wrong += forbidden_in_codec(path.read_text("utf-8"), dotted(path), is_package=is_package)
    assert wrong == []


@pytest.mark.parametrize(
    "source",
    ["import time", "from threading import Lock", "import os.path", "import logging", "open('x')", "import io"],
)
def test_input_or_output_in_the_codec_would_be_noticed(source: str) -> None:
    assert len(forbidden_in_codec(source, "ramprig_link.lines", is_package=False)) == 1


def test_ports_know_bytes_and_not_lines() -> None:
    for path in module_files(PROGRAM / "port"):
        names = imports_of(ast.parse(path.read_text("utf-8")), dotted(path), is_package=path.name == "__init__.py")
        assert not [name for name, _ in names if name.split(".")[0] == "ramprig_link"], path


def loaded_at_start(module: str, seen: set[str]) -> Iterator[str]:
    """Outside packages that importing `module` loads, following the program's own modules, functions left out."""
    path = PROGRAM.parent.joinpath(*module.split("."))
    file = path / "__init__.py" if path.is_dir() else path.with_suffix(".py")
    if module in seen or not file.exists():
        return
    seen.add(module)
    tree = ast.parse(file.read_text("utf-8"))
    for statement in tree.body:
        if not isinstance(statement, ast.Import | ast.ImportFrom):
            continue
        for name, _ in imports_of(statement, module, is_package=file.name == "__init__.py"):
            parts = name.split(".")
            if parts[0] != "ramprig":
                yield parts[0]
            for count in range(1, len(parts) + 1):
                yield from loaded_at_start(".".join(parts[:count]), seen)


def test_the_command_starts_without_heavy_imports() -> None:
    seen: set[str] = set()
    loaded = set(loaded_at_start("ramprig", seen)) | set(loaded_at_start("ramprig.cli", seen))
    assert "ramprig" in seen
    assert loaded & HEAVY == set()
