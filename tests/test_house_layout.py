"""The folders, the sizes of files and functions, and that no file speaks of the machine it was written on."""

from __future__ import annotations

import ast
import re
import subprocess
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent

TOP_FILES = {"README.md", "DEVELOPERS.md", "LICENSE", "pyproject.toml"}
TOP_FOLDERS = {"runtime", "protocol", "firmware_ref", "tests", "scripts"}
LONGEST_FILE_LINES = 600
LONGEST_FUNCTION_LINES = 80
MACHINE_PATH = re.compile(r"(?<![\w.~}-])/(?:work|root)/|(?<![\w.~}-])/home/\w+/|\b[A-Za-z]:\\Users\\", re.ASCII)


def tracked_files() -> list[Path]:
    """What git tracks, where this is a git checkout; else every file outside the dot-folders."""
    done = subprocess.run(["git", "ls-files", "-z"], cwd=ROOT, capture_output=True, check=False)
    if (ROOT / ".git").exists() and done.returncode == 0:
        names = done.stdout.decode("utf-8").split("\0")
        return [ROOT / name for name in names if name and (ROOT / name).is_file()]
    hidden = re.compile(r"(^|/)(\.|__pycache__)")
    return [path for path in ROOT.rglob("*") if path.is_file() and not hidden.search(str(path.relative_to(ROOT)))]


def generated() -> set[str]:
    """Files that a script writes, which the linter's settings name too."""
    settings = tomllib.loads((ROOT / "pyproject.toml").read_text("utf-8"))
    return set(settings["tool"]["ruff"]["extend-exclude"])


def python_files() -> list[Path]:
    return [path for path in tracked_files() if path.suffix == ".py" and str(path.relative_to(ROOT)) not in generated()]


def test_the_top_holds_only_what_the_house_has() -> None:
    tops = {path.relative_to(ROOT).parts[0] for path in tracked_files()}
    assert {name for name in tops if not name.startswith(".")} <= TOP_FILES | TOP_FOLDERS


def test_no_python_file_is_too_long() -> None:
    lengths = {str(path.relative_to(ROOT)): len(path.read_text("utf-8").splitlines()) for path in python_files()}
    assert {name: lines for name, lines in lengths.items() if lines > LONGEST_FILE_LINES} == {}


def long_functions(source: str, name: str, limit: int) -> list[str]:
    found = []
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
            lines = (node.end_lineno or node.lineno) - node.lineno + 1
            if lines > limit:
                found.append(f"{name}:{node.lineno}: {node.name} has {lines} lines")
    return found


def test_no_function_is_too_long() -> None:
    wrong = []
    for path in python_files():
        wrong += long_functions(path.read_text("utf-8"), str(path.relative_to(ROOT)), LONGEST_FUNCTION_LINES)
    assert wrong == []


def test_a_long_function_is_noticed() -> None:
    assert long_functions("def f():\n" + "    x = 1\n" * 3, "a.py", 3) == ["a.py:1: f has 4 lines"]


def test_no_file_speaks_of_the_machine_it_was_written_on() -> None:
    wrong = []
    for path in tracked_files():
        try:
            text = path.read_text("utf-8")
        except UnicodeDecodeError:
            continue
        for number, line in enumerate(text.splitlines(), 1):
            if MACHINE_PATH.search(line):
                wrong.append(f"{path.relative_to(ROOT)}:{number}: {line.strip()}")
    assert wrong == []


@pytest.mark.parametrize("folder", ["work", "root", "home/someone"])
def test_a_machine_path_is_noticed(folder: str) -> None:
    assert MACHINE_PATH.search(f"see /{folder}/notes.txt")


@pytest.mark.parametrize("text", ["https://example.org/work/x", "./work/x", "network/root/x", "~/work/"])
def test_other_paths_are_not_mistaken(text: str) -> None:
    assert MACHINE_PATH.search(text) is None


def test_the_private_environment_is_not_tracked() -> None:
    assert not [path for path in tracked_files() if ".env" in path.relative_to(ROOT).parts]
