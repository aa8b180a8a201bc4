"""The lock file that keeps two processes off one port and tells who holds it."""

from __future__ import annotations

import dataclasses
import os
import subprocess
import sys
from datetime import UTC, datetime
from pathlib import Path

import pytest

from ramprig.port.portlock import Holder, PortHeld, PortLock, is_alive, lock_path, process_start, read_holder

pytestmark = pytest.mark.skipif(os.name != "posix", reason="Windows opens serial ports exclusively by itself")

SINCE = datetime(2026, 3, 1, 21, 4, 5, tzinfo=UTC)


def test_the_holder_is_told_to_the_one_who_comes_second(tmp_path: Path) -> None:
    lock = PortLock("/dev/ttyX0", folder=str(tmp_path), now=SINCE)
    with pytest.raises(PortHeld) as caught:
        PortLock("/dev/ttyX0", folder=str(tmp_path))
    assert caught.value.holder is not None
    assert caught.value.holder.pid == os.getpid()
    assert "since 2026-03-01T21:04:05Z" in str(caught.value)
    lock.release()


def test_a_released_lock_can_be_taken_again(tmp_path: Path) -> None:
    first = PortLock("/dev/ttyX0", folder=str(tmp_path))
    first.release()
    first.release()
    assert read_holder(lock_path("/dev/ttyX0", str(tmp_path))) is None
    PortLock("/dev/ttyX0", folder=str(tmp_path)).release()


def test_other_ports_are_free(tmp_path: Path) -> None:
    first = PortLock("/dev/ttyX0", folder=str(tmp_path))
    PortLock("/dev/ttyX1", folder=str(tmp_path)).release()
    first.release()


def test_a_link_and_its_device_share_one_lock(tmp_path: Path) -> None:
    device, link = tmp_path / "device", tmp_path / "link"
    device.touch()
    link.symlink_to(device)
    assert lock_path(str(link)) == lock_path(str(device))


@pytest.mark.parametrize("content", [b"", b"{", b"[]", b"null", b'{"pid": "x"}', b"\xff" * 5000])
def test_a_file_left_behind_in_any_state_keeps_nobody_out(tmp_path: Path, content: bytes) -> None:
    lock_path("/dev/ttyX0", str(tmp_path)).write_bytes(content)
    lock = PortLock("/dev/ttyX0", folder=str(tmp_path))
    holder = read_holder(lock_path("/dev/ttyX0", str(tmp_path)))
    assert holder is not None
    assert holder.pid == os.getpid()
    lock.release()


@pytest.mark.process
def test_a_killed_holder_keeps_nobody_out(tmp_path: Path) -> None:
    code = (
        "import sys, os\nfrom ramprig.port.portlock import PortLock\n"
        "lock = PortLock('/dev/ttyX0', folder=sys.argv[1])\nprint('held', flush=True)\nsys.stdin.read()\n"
    )
    with subprocess.Popen(
        [sys.executable, "-c", code, str(tmp_path)], stdin=subprocess.PIPE, stdout=subprocess.PIPE
    ) as child:
        assert child.stdout is not None
        assert child.stdout.readline() == b"held\n"
        with pytest.raises(PortHeld, match=f"process {child.pid} "):
            PortLock("/dev/ttyX0", folder=str(tmp_path))
        child.kill()
        child.wait(10)
        left = read_holder(lock_path("/dev/ttyX0", str(tmp_path)))
        assert left is not None
        assert not is_alive(left)
        PortLock("/dev/ttyX0", folder=str(tmp_path)).release()


def test_a_process_with_a_reused_number_is_not_the_holder() -> None:
    me = Holder(os.getpid(), "2026-03-01T21:04:05Z", process_start(os.getpid()), "ramprig run")
    assert is_alive(me)
    if me.process_start:
        assert not is_alive(dataclasses.replace(me, process_start=me.process_start + 1))
    assert not is_alive(dataclasses.replace(me, pid=0))


def test_a_folder_that_cannot_be_written_keeps_nobody_out(tmp_path: Path) -> None:
    lock = PortLock("/dev/ttyX0", folder=str(tmp_path / "missing"))
    lock.release()
    assert list(tmp_path.iterdir()) == []


def test_a_planted_link_is_not_followed(tmp_path: Path) -> None:
    victim = tmp_path / "victim"
    victim.write_text("precious")
    lock_path("/dev/ttyX0", str(tmp_path)).symlink_to(victim)
    PortLock("/dev/ttyX0", folder=str(tmp_path)).release()
    assert victim.read_text() == "precious"
