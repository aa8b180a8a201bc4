"""The scripts' private environment: when it is used, updated or made again, and what the user is told. No network."""

from __future__ import annotations

import importlib.util
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from types import ModuleType
from typing import Any

import pytest

SCRIPTS = Path(__file__).resolve().parent.parent / "scripts"


def load(name: str) -> ModuleType:
    """A script as a module, without leaving its folder on the path."""
    spec = importlib.util.spec_from_file_location(f"ramprig_script_{name}", SCRIPTS / f"{name}.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    path = list(sys.path)
    try:
        spec.loader.exec_module(module)
    finally:
        sys.path[:] = path
    return module


environment = load("environment")
WANTED = {
    "implementation": "cpython", "version": "3.11.2", "home": "/usr", "place": "/p/.env", "project": "aa", "lock": "bb",
}  # fmt: skip
PROBED = {"implementation": "cpython", "version": "3.11.2", "home": "/usr", "missing": ""}


@pytest.mark.parametrize(
    ("found", "probed", "expected"),
    [
        (WANTED, PROBED, "use"),
        ({}, PROBED, "update"),  # made by hand: adopted
        ({**WANTED, "lock": "old"}, PROBED, "update"),
        ({**WANTED, "project": "old"}, PROBED, "update"),
        (WANTED, {**PROBED, "missing": "numpy"}, "update"),
        (WANTED, {}, "rebuild"),  # its Python does not run
        ({}, {}, "rebuild"),  # nothing there
        (WANTED, {**PROBED, "version": "3.12.1"}, "rebuild"),
        (WANTED, {**PROBED, "home": "/opt"}, "rebuild"),
        ({**WANTED, "place": "/elsewhere/.env"}, PROBED, "rebuild"),  # moved: its scripts name the old place
    ],
)
def test_what_is_done_with_an_environment(found: dict[str, str], probed: dict[str, str], expected: str) -> None:
    assert environment.plan(wanted=WANTED, found=found, probed=probed) == expected


def test_a_stamp_is_read_back_as_written(tmp_path: Path) -> None:
    environment.write_stamp(str(tmp_path), WANTED)
    assert environment.read_stamp(str(tmp_path)) == WANTED
    assert [path.name for path in tmp_path.iterdir()] == [environment.STAMP_NAME]


@pytest.mark.parametrize("content", [b"", b"{", b"[1]", b"\xff\xfe", b'"text"'])
def test_a_damaged_stamp_counts_as_none(tmp_path: Path, content: bytes) -> None:
    (tmp_path / environment.STAMP_NAME).write_bytes(content)
    assert environment.read_stamp(str(tmp_path)) == {}


def test_the_stamp_follows_both_files(tmp_path: Path) -> None:
    project, lock = tmp_path / "pyproject.toml", tmp_path / ".requirements.lock"
    project.write_text("a")
    lock.write_text("b")

    def stamp() -> dict[str, str]:
        made: dict[str, str] = environment.wanted_stamp(
            env_dir=str(tmp_path / ".env"), project_file=str(project), lock_file=str(lock)
        )
        return made

    first = stamp()
    assert stamp() == first
    project.write_text("a2")
    second = stamp()
    lock.write_text("b2")
    third = stamp()
    assert {key for key in first if first[key] != second[key]} == {"project"}
    assert {key for key in second if second[key] != third[key]} == {"lock"}


def test_an_environment_that_is_not_there_answers_nothing(tmp_path: Path) -> None:
    assert environment.probe(str(tmp_path / ".env")) == {}


@pytest.fixture
def ready_world(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> tuple[ModuleType, list[str], dict[str, str]]:
    """The environment script over a made-up project, with the slow steps noted in a list in place of done."""
    module = load("environment")
    (tmp_path / "pyproject.toml").write_text("p")
    (tmp_path / ".requirements.lock").write_text("l")
    steps: list[str] = []
    probed: dict[str, str] = {}
    facts = {**environment.interpreter_facts(), "missing": ""}

    def make(env_dir: str) -> None:
        Path(env_dir).mkdir()
        steps.append("make")

    def install(env_dir: str, *, lock_file: str) -> None:
        probed.update(facts)
        steps.append("install")

    replacements: dict[str, Any] = {
        "ENV_DIR": str(tmp_path / ".env"),
        "PROJECT_FILE": str(tmp_path / "pyproject.toml"),
        "LOCK_FILE": str(tmp_path / ".requirements.lock"),
        "make_environment": make,
        "install": install,
        "probe": lambda env_dir: dict(probed),
        "turn_path": lambda env_dir: str(tmp_path / "turn"),
        "say": steps.append,
    }
    for name, value in replacements.items():
        monkeypatch.setattr(module, name, value)
    return module, steps, probed


World = tuple[ModuleType, list[str], dict[str, str]]


def test_the_first_start_makes_it_in_one_line_and_the_second_says_nothing(ready_world: World) -> None:
    module, steps, _ = ready_world
    module.ready()
    assert len(steps) == 3
    assert steps[0].startswith("Making the private environment .env")
    assert steps[1:] == ["make", "install"]
    steps.clear()
    module.ready()
    assert steps == []


def test_a_changed_lock_file_brings_an_update(ready_world: World) -> None:
    module, steps, _ = ready_world
    module.ready()
    steps.clear()
    Path(module.LOCK_FILE).write_text("l2")
    module.ready()
    assert steps == ["Bringing the private environment .env up to date with .requirements.lock ...", "install"]


def test_a_failed_installation_leaves_no_stamp(ready_world: World, monkeypatch: pytest.MonkeyPatch) -> None:
    module, _, probed = ready_world

    def fail(env_dir: str, *, lock_file: str) -> None:
        raise module.NotReady("no network")

    monkeypatch.setattr(module, "install", fail)
    with pytest.raises(module.NotReady, match="no network"):
        module.ready()
    assert module.read_stamp(module.ENV_DIR) == {}
    assert probed == {}


def test_a_python_without_ensurepip_is_told_which_debian_package(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(environment, "on_debian", lambda: True)
    monkeypatch.setattr(environment.os, "geteuid", lambda: 1000, raising=False)
    with pytest.raises(environment.NotReady) as caught:
        environment.install_venv_package()
    major, minor = sys.version_info[:2]
    assert f"sudo apt-get install python{major}.{minor}-venv" in str(caught.value)


def test_elsewhere_it_is_told_without_apt(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(environment, "on_debian", lambda: False)
    with pytest.raises(environment.NotReady) as caught:
        environment.install_venv_package()
    assert "apt-get" not in str(caught.value)
    assert "ensurepip" in str(caught.value)


def finished(status: int) -> Callable[..., subprocess.CompletedProcess[bytes]]:
    def run(command: list[str], **_: object) -> subprocess.CompletedProcess[bytes]:
        return subprocess.CompletedProcess(command, status, b"first\nE: last words\n", b"")

    return run


def test_root_on_debian_installs_it_after_saying_so(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    module = load("environment")
    ran: list[list[str]] = []

    def run(command: list[str], **_: object) -> subprocess.CompletedProcess[bytes]:
        ran.append(command)
        return subprocess.CompletedProcess(command, 0, b"", b"")

    monkeypatch.setattr(module, "on_debian", lambda: True)
    monkeypatch.setattr(module.os, "geteuid", lambda: 0, raising=False)
    monkeypatch.setattr(module.subprocess, "run", run)
    module.install_venv_package()
    package = module.venv_package()
    assert ran[0][:2] == ["apt-get", "install"]
    assert ran[0][-1] == package
    assert capsys.readouterr().out.splitlines() == [
        f"This Python lacks 'ensurepip': installing the Debian package {package} with apt-get ..."
    ]


def test_a_failed_step_shows_its_command_and_last_words(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(environment.subprocess, "run", finished(1))
    with pytest.raises(environment.NotReady) as caught:
        environment.run_or_explain(["pip", "install"], "the packages were not installed")
    assert str(caught.value).splitlines() == [
        "the packages were not installed; it ran: pip install", "    first", "    E: last words",
    ]  # fmt: skip


def test_an_old_python_is_told_in_a_sentence(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sys, "version_info", (3, 8, 10, "final", 0))
    with pytest.raises(SystemExit) as caught:
        load("environment")
    assert str(caught.value.code).startswith("ramprig needs Python 3.11 or newer; this is Python 3.8 (")


def test_the_scripts_stay_readable_to_old_pythons() -> None:
    import ast

    for name in ("environment", "test", "demo"):
        ast.parse((SCRIPTS / f"{name}.py").read_text("utf-8"), feature_version=(3, 7))


def test_variables_that_bend_imports_are_left_out(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("PYTHONPATH", "/x")
    monkeypatch.setenv("RAMPRIG_KEPT", "1")
    kept = environment.clean_variables()
    assert "PYTHONPATH" not in kept
    assert kept["RAMPRIG_KEPT"] == "1"


def test_the_lock_file_is_pinned_by_hash_and_names_no_place() -> None:
    text = (SCRIPTS.parent / ".requirements.lock").read_text("utf-8")
    requirements = [line for line in text.splitlines() if line and not line.startswith((" ", "#"))]
    assert len(requirements) > 20
    assert all("==" in line and line.endswith("\\") for line in requirements)
    assert text.count("--hash=sha256:") >= len(requirements)
    assert "://" not in text
    assert "index-url" not in text


def test_the_test_script_runs_lint_types_and_tests_in_that_order() -> None:
    script = load("test")
    titles = [title.split(":")[0] for title, _ in script.commands("python", [])]
    assert titles == ["ruff", "mypy", "pytest"]
    assert [title for title, _ in script.commands("python", ["--quick"])] == ["pytest: the tests"]


def test_the_test_script_passes_the_rest_to_pytest() -> None:
    script = load("test")
    command = script.commands("python", ["--soak", "-k", "name"])[-1][1]
    assert command == ["python", "-m", "pytest", "-m", "soak or not soak", "-k", "name"]


def test_a_failed_check_does_not_keep_the_others_from_running(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    script = load("test")
    statuses = iter([1, 0, 0])

    def run(command: list[str], **_: object) -> subprocess.CompletedProcess[bytes]:
        return subprocess.CompletedProcess(command, next(statuses), b"", b"")

    monkeypatch.setattr(script.environment, "ready_or_exit", lambda: "python")
    monkeypatch.setattr(script.subprocess, "run", run)
    assert script.main([]) == 1
    assert capsys.readouterr().out.splitlines()[-1] == "ruff FAILED, mypy passed, pytest passed"
