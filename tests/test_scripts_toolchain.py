"""Which tools are missing, what they are called on Debian, and that they are installed only where we may."""

from __future__ import annotations

import subprocess
from pathlib import Path

import pytest
import toolchain
from toolchain import Part

HERE = Part("what is here", ("sh",), ("/",), ("dash",))
NOT_HERE = Part("what is nowhere", ("sh", "no-such-program"), (), ("first-package", "second-package"))
NO_FILE = Part("a library that is nowhere", ("sh",), ("/no/such/*.h",), ("second-package", "third-package"))


def test_a_part_is_there_with_all_its_programs_and_files() -> None:
    assert toolchain.is_there(HERE)
    assert not toolchain.is_there(NOT_HERE)
    assert not toolchain.is_there(NO_FILE)


def test_what_is_missing_is_told_with_its_packages_each_once() -> None:
    assert toolchain.why_not(HERE) == ""
    assert toolchain.why_not(HERE, NOT_HERE, NO_FILE) == (
        "tools missing for what is nowhere and a library that is nowhere: "
        "install first-package second-package third-package"
    )


def test_without_the_right_to_install_the_parts_are_named_as_skipped(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(toolchain, "PARTS", (HERE, NOT_HERE))
    monkeypatch.setattr(toolchain, "may_install", lambda: False)
    said: list[str] = []
    assert toolchain.provide(said.append) == [NOT_HERE]
    assert said == ["SKIPPED, not passed: what is nowhere; it needs: apt-get install first-package second-package"]


class Apt:
    """In apt's place: what was run, what it knows, and how often an installation fails."""

    def __init__(self, monkeypatch: pytest.MonkeyPatch, *, knows: tuple[str, ...], fails: int = 0) -> None:
        self.ran: list[str] = []
        self.knows = knows
        self.fails = fails
        monkeypatch.setattr(toolchain, "may_install", lambda: True)
        monkeypatch.setattr(subprocess, "run", self.run)

    def run(self, command: list[str], **_: object) -> subprocess.CompletedProcess[str]:
        self.ran.append(" ".join([*command[:2], *(word for word in command[2:] if not word.startswith("-"))]))
        if command[0] == "apt-cache":
            said = [
                f"{name}:\n  Installed: (none)\n  Candidate: {'1.0-1' if name in self.knows else '(none)'}\n"
                for name in command[2:]
                if name != "third-package" or name in self.knows  # of a name it never heard apt says nothing
            ]
            return subprocess.CompletedProcess(command, 0, "".join(said))
        fails = command[1] == "install" and self.ran.count(self.ran[-1]) <= self.fails
        return subprocess.CompletedProcess(command, 100 if fails else 0)


@pytest.fixture
def some_lists(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "main_Packages").touch()
    monkeypatch.setattr(toolchain, "LISTS", str(tmp_path / "*Packages*"))


@pytest.mark.usefixtures("some_lists")
def test_as_root_on_debian_the_packages_are_asked_for(monkeypatch: pytest.MonkeyPatch) -> None:
    apt = Apt(monkeypatch, knows=NOT_HERE.packages)
    monkeypatch.setattr(toolchain, "PARTS", (NOT_HERE,))
    said: list[str] = []
    assert toolchain.provide(said.append) == [NOT_HERE]  # the packages did not bring it
    assert apt.ran == ["apt-cache policy first-package second-package", "apt-get install first-package second-package"]
    assert said == [
        "Installing with apt-get: first-package second-package ...",
        "SKIPPED, not passed: what is nowhere; it needs: apt-get install first-package second-package",
    ]


@pytest.mark.usefixtures("some_lists")
def test_a_package_that_the_release_lacks_keeps_no_other_part_out_and_is_never_fetched(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    apt = Apt(monkeypatch, knows=NOT_HERE.packages)
    monkeypatch.setattr(toolchain, "PARTS", (HERE, NOT_HERE, NO_FILE))
    said: list[str] = []
    assert toolchain.provide(said.append) == [NOT_HERE, NO_FILE]
    assert apt.ran[1:] == ["apt-get install first-package second-package"]
    assert said[-1] == (
        "SKIPPED, not passed: a library that is nowhere; this release of the system has no package third-package"
    )
    apt.ran.clear()
    monkeypatch.setattr(toolchain, "PARTS", (HERE, NO_FILE))
    assert toolchain.provide(said.append) == [NO_FILE]
    assert apt.ran == ["apt-cache policy second-package third-package"]


@pytest.mark.usefixtures("some_lists")
def test_lists_that_are_too_old_are_fetched_once_and_each_part_is_then_asked_for_alone(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    apt = Apt(monkeypatch, knows=(*NOT_HERE.packages, *NO_FILE.packages), fails=1)
    monkeypatch.setattr(toolchain, "PARTS", (NOT_HERE, NO_FILE))
    toolchain.provide(lambda _: None)
    assert apt.ran[1:] == [
        "apt-get install first-package second-package third-package",
        "apt-get update",
        "apt-get install first-package second-package",
        "apt-get install second-package third-package",
    ]


def test_without_any_lists_they_are_fetched_first(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    apt = Apt(monkeypatch, knows=())
    monkeypatch.setattr(toolchain, "PARTS", (NOT_HERE,))
    monkeypatch.setattr(toolchain, "LISTS", str(tmp_path / "*Packages*"))
    toolchain.provide(lambda _: None)
    assert apt.ran == ["apt-get update", "apt-cache policy first-package second-package"]


def test_every_part_of_the_project_names_packages() -> None:
    assert all(part.packages and part.programs for part in toolchain.PARTS)
