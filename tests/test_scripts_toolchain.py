"""Which tools are missing, what they are called on Debian, and that they are installed only where we may."""

from __future__ import annotations

import subprocess

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


def test_as_root_on_debian_the_packages_are_asked_for(monkeypatch: pytest.MonkeyPatch) -> None:
    ran: list[list[str]] = []

    def run(command: list[str], **_: object) -> subprocess.CompletedProcess[bytes]:
        ran.append(command)
        return subprocess.CompletedProcess(command, 0)

    monkeypatch.setattr(toolchain, "PARTS", (NOT_HERE,))
    monkeypatch.setattr(toolchain, "may_install", lambda: True)
    monkeypatch.setattr(subprocess, "run", run)
    said: list[str] = []
    assert toolchain.provide(said.append) == [NOT_HERE]  # the packages did not bring it
    assert ran[0][:2] == ["apt-get", "install"]
    assert ran[0][-2:] == ["first-package", "second-package"]


def test_every_part_of_the_project_names_packages() -> None:
    assert all(part.packages and part.programs for part in toolchain.PARTS)
