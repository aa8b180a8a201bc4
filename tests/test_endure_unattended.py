"""Unattended runs: every rule that does not hold is named, the door sheet says what a stranger needs, sleep is told."""

from __future__ import annotations

import re
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC
from html.parser import HTMLParser
from pathlib import Path
from types import SimpleNamespace

import pytest

from ramprig.bench import Bench, bench_of_text
from ramprig.endure import awake
from ramprig.endure.awake import CANNOT_PREVENT, keep_awake
from ramprig.endure.doorsheet import DoorSheet, door_sheet
from ramprig.endure.unattended import forecast_bytes, longest_s, missing_rules
from ramprig.errors import PackageMissing, UsageError
from ramprig.sequence.compile import compile_plan
from ramprig.sequence.reading import Sequence, read_sequence

BENCH = Path(__file__).resolve().parent.parent / "scripts" / "vent_bench.yaml"
MUCH = 10**12
NIGHT = """sequence: vent night
about: Opens the vent again and again.
on interruption: {resume at most: 2, within: 5 min}
steps:
  - cycle:
      name: open
      times: 1000
      rest: 20 s
      starts per hour: 150
      steps:
        - ramp: {motor: vent, to: 60 %, in: 800 ms}
        - hold: 4 s
        - expect: {current of: vent, is: at most 1 A, over: 1 s}
        - confirm: {position of: vent, is: at least 500 deg}
        - coast: {motor: vent, in: 800 ms}
"""


def night(folder: Path, text: str = NIGHT) -> Sequence:
    path = folder / "night.yaml"
    path.write_text(text, "utf-8")
    return read_sequence(path)


def bench(*changes: tuple[str, str]) -> Bench:
    """The example bench, filled in, with lines changed; each pattern must be there."""
    text = BENCH.read_text("utf-8")
    text = re.sub("<name and telephone.*>", "A. Miller, 555 0100", text).replace("<room, bench, socket>", "room 12")
    for pattern, put in changes:
        text, count = re.subn(pattern, put, text, flags=re.MULTILINE)
        assert count, pattern
    return bench_of_text(text, "bench.yaml")


def missing(sequence: Sequence, bench: Bench, *, url: str = "mock:", free_bytes: int = MUCH) -> list[str]:
    plan = compile_plan(sequence, bench)
    return [str(rule) for rule in missing_rules(bench, sequence, plan, url=url, free_bytes=free_bytes)]


# ---- the rules -----------------------------------------------------------------------------------------------------


def test_the_example_bench_holds_every_rule(tmp_path: Path) -> None:
    assert missing(night(tmp_path), bench()) == []


def test_what_nobody_has_filled_in_is_not_said(tmp_path: Path) -> None:
    named = missing(night(tmp_path), bench_of_text(BENCH.read_text("utf-8"), "bench.yaml"))
    assert [one.partition(": not said")[0] for one in named] == [
        "bench.yaml: safety: contact",
        "bench.yaml: safety: place",
    ]


@pytest.mark.parametrize(
    ("pattern", "put", "key"),
    [
        (r"^  contact:.*$", "", "bench.yaml: safety: contact"),
        (r"^  place:.*$", "", "bench.yaml: safety: place"),
        (r"^  fuse:.*$", "", "bench.yaml: safety: fuse"),
        (r"^  power cut:.*$", "", "bench.yaml: safety: power cut"),
        (r"^  guard:.*$", "", "bench.yaml: safety: guard"),
        (r"^  lease:.*$", "", "bench.yaml: link: lease"),
        (r"^  stop within:.*$", "", "bench.yaml: link: stop within"),
        (r"^  allowed: 9 V to 16 V", "  allowed: at most 16 V", "bench.yaml: supply: allowed"),
        (r"^      time constant:.*$", "", "bench.yaml: motors: vent: rated: time constant"),
        (r"^      stall:.*$", "      stall: off", "bench.yaml: motors: vent: limits: stall"),
        (r"^      stall:.*$", "", "bench.yaml: motors: vent: limits: stall"),
        (r"^      wrong way:.*$", "", "bench.yaml: motors: vent: limits: wrong way"),
        (r"^      speed: 75 rpm$", "", "bench.yaml: motors: vent: limits: speed"),
    ],
)
def test_each_missing_rule_is_named_by_file_and_key_and_no_other_is(
    tmp_path: Path, pattern: str, put: str, key: str
) -> None:
    (named,) = missing(night(tmp_path), bench((pattern, put)))
    assert named.startswith(key + ": ")
    assert len(named) > len(key) + 10


def test_a_motor_without_an_encoder_is_named_since_its_stall_is_not_noticed(tmp_path: Path) -> None:
    changed = bench(
        (r"^    encoder:\n(      .*\n)+", "    encoder: none\n"),
        (r"^      (stall|wrong way|standstill):.*\n", ""),
        (r"^      speed: 75 rpm\n", ""),
    )
    text = re.sub(r".*confirm.*\n", "", NIGHT)
    (named,) = missing(night(tmp_path, text), changed)
    assert named.startswith("bench.yaml: motors: vent: encoder: ")


def test_a_motor_that_the_sequence_does_not_drive_is_not_asked_about(tmp_path: Path) -> None:
    text = "sequence: s\nsteps: [{move: {servo: latch, to: 5 deg, in: 1 s}}]\n"
    assert missing(night(tmp_path, text), bench((r"^      stall:.*$", "      stall: off"))) == []


def test_several_missing_rules_are_all_named(tmp_path: Path) -> None:
    changed = bench((r"^safety:\n(  .*\n)+", ""), (r"^link:\n(  .*\n)+", ""))
    named = missing(night(tmp_path, NIGHT.replace("on interruption", "about: x\non interruption", 0)), changed)
    assert len(named) == 7


def test_what_an_interruption_leads_to_must_be_said_of_cycles(tmp_path: Path) -> None:
    text = re.sub(r"on interruption.*\n", "", NIGHT)
    (named,) = missing(night(tmp_path, text), bench())
    assert named.startswith(f"{tmp_path / 'night.yaml'}: on interruption: not said")


def test_a_motor_that_tripped_is_not_started_again_with_nobody_there(tmp_path: Path) -> None:
    text = NIGHT.replace("within: 5 min}", "within: 5 min, after a trip: yes}")
    (named,) = missing(night(tmp_path, text), bench())
    assert named.startswith(f"{tmp_path / 'night.yaml'}: on interruption: after a trip: ")


def test_any_board_may_answer_on_a_mock_alone(tmp_path: Path) -> None:
    assert missing(night(tmp_path), bench(), url="core:") == []
    (named,) = missing(night(tmp_path), bench(), url="/dev/ttyACM0")
    assert named.startswith("bench.yaml: board: serial")


def test_a_plan_that_may_take_weeks_needs_a_bound(tmp_path: Path) -> None:
    sequence = night(tmp_path, NIGHT.replace("times: 1000", "times: 100000"))
    (named,) = missing(sequence, bench())
    assert named.startswith("--at-most: the plan may take ")
    plan = compile_plan(sequence, bench())
    bounded = missing_rules(bench(), sequence, plan, url="mock:", free_bytes=MUCH, at_most_s=8 * 3600.0)
    assert bounded == ()
    assert longest_s(plan, sequence, at_most_s=8 * 3600.0) == 8 * 3600.0


def test_a_disk_that_would_be_full_before_the_morning_is_named(tmp_path: Path) -> None:
    sequence = night(tmp_path)
    plan = compile_plan(sequence, bench())
    size = forecast_bytes(bench(), plan, longest_s(plan, sequence, at_most_s=None))
    assert size > 10**8
    (named,) = missing(sequence, bench(), free_bytes=size)
    assert named.startswith("--runs: ")
    assert "twice that" in named


# ---- the door sheet ------------------------------------------------------------------------------------------------


def sheet(folder: Path, bench: Bench) -> DoorSheet:
    sequence = night(folder)
    return door_sheet(
        bench,
        sequence,
        compile_plan(sequence, bench),
        start_unix_s=1_800_000_000.0,
        latest_end_unix_s=1_800_036_000.0,
        host="lab-pc-3",
        zone=UTC,
    )


GOLDEN = """\
==============================================================================
UNATTENDED TEST RUNNING - until Fri 15 Jan 2027 18:00 (UTC+0000) at the latest
==============================================================================

TO MAKE IT DEAD
  1. cut the power: red mushroom button left of the rig
  2. then unplug the supply of the bridges, and see that nothing turns
  if the computer fails, the board stops by itself after 500 ms of silence and
    is off 1 s later; Ctrl-C at the computer stops in order

WHOM TO CALL
  A. Miller, 555 0100

HAZARDS
  motor 'vent' turns at up to 60 % of full drive, both ways if the test says
    so
  servo 'latch' moves between -40 deg and 40 deg
  everything starts by itself and without warning, also after a pause of about
    20 s
  after a lost link or a restart it may start again by itself, 2 times, within
    5 min
  supply 12 V, fuse 3 A; motors and bridge may be hot
  guard: clear cover over the gear

NOT NORMAL
  smoke, smell, sparks, a new noise, anything loose: isolate, leave it off,
    call
  the computer says tripped, link lost or stopped: the motor is off; leave it
    so, call

NOTE
  A stop by software is not an emergency stop: only the power cut makes the
    bench safe to touch.

WHAT RUNS
  vent night: Opens the vent again and again.
  on the bench 'greenhouse vent drive', board ramprig-mock (any serial)
  cycle 'open' x 1000, rest 20 s, at most 150 starts per hour

WHERE
  room 12; driven by the computer lab-pc-3

WHEN
  from Fri 15 Jan 2027 08:00 (UTC+0000), planned to end Fri 15 Jan 2027 15:06
    (UTC+0000) (7 h 6 min)
  over at Fri 15 Jan 2027 18:00 (UTC+0000) at the latest; if it still runs
    then, isolate it

WHAT NORMAL LOOKS LIKE
  each 'open' takes about 5.6 s, then rests about 20 s
  current of vent is at most 1 A over 1 s
  position of vent since cycle begin is at least 500 deg
"""


def test_the_door_sheet_says_what_a_stranger_needs(tmp_path: Path) -> None:
    assert sheet(tmp_path, bench()).text() == GOLDEN


class Outside(HTMLParser):
    """Collects what a page would fetch, and its tags."""

    def __init__(self) -> None:
        super().__init__()
        self.fetched: list[str] = []
        self.text = ""

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.fetched += [str(value) for name, value in attrs if name in ("src", "href")]

    def handle_data(self, data: str) -> None:
        self.text += data


def test_the_door_sheet_as_a_page_says_the_same_and_fetches_nothing(tmp_path: Path) -> None:
    changed = bench((r"^  contact:.*$", '  contact: "A. <b>Nobody</b> & co, 555"'))
    page = sheet(tmp_path, changed).html()
    parser = Outside()
    parser.feed(page)
    assert parser.fetched == []
    assert "url(" not in page
    assert "<script" not in page
    assert "A. <b>Nobody</b> & co, 555" in parser.text  # escaped in the page
    assert "<b>" not in page
    assert "@page" in page
    for _, items in sheet(tmp_path, changed).sections:
        for item in items:
            assert item in parser.text


def test_what_the_bench_file_does_not_say_is_said_to_be_missing_on_the_sheet(tmp_path: Path) -> None:
    text = sheet(tmp_path, bench((r"^  contact:.*$", ""), (r"^  fuse:.*$", ""))).text()
    assert "NOT SAID in the bench file" in text
    assert "no fuse is named" in text


# ---- staying awake -------------------------------------------------------------------------------------------------


def fake_keep(*, active: bool) -> SimpleNamespace:
    """A package like wakepy that records whether its lock is held."""
    keep = SimpleNamespace(held=[])

    @contextmanager
    def running(*, on_fail: str) -> Iterator[SimpleNamespace]:
        assert on_fail == "pass"
        keep.held.append("on")
        yield SimpleNamespace(active=active, active_method="org.example.Inhibit" if active else None)
        keep.held.append("off")

    keep.running = running
    keep.keep = keep
    return keep


def test_the_computer_is_kept_awake_as_long_as_it_is_asked_for(monkeypatch: pytest.MonkeyPatch) -> None:
    keep = fake_keep(active=True)
    monkeypatch.setattr(awake, "need", lambda module, purpose: keep)
    with keep_awake(accept_sleep=False) as kept:
        assert keep.held == ["on"]
    assert keep.held == ["on", "off"]
    assert "org.example.Inhibit" in str(kept)
    assert CANNOT_PREVENT in str(kept)
    for what in ("closed lid", "power button", "battery", "updates"):
        assert what in CANNOT_PREVENT


@pytest.mark.parametrize("at", ["begin", "end"])
def test_a_desktop_that_fails_neither_begins_nor_ends_a_run_wrongly(monkeypatch: pytest.MonkeyPatch, at: str) -> None:
    @contextmanager
    def running(*, on_fail: str) -> Iterator[SimpleNamespace]:
        if at == "begin":
            raise OSError("the bus is gone")
        yield SimpleNamespace(active=True, active_method="org.example.Inhibit")
        raise OSError("the bus is gone")

    keep = SimpleNamespace(keep=SimpleNamespace(running=running))
    monkeypatch.setattr(awake, "need", lambda module, purpose: keep)
    with keep_awake(accept_sleep=True) as kept:
        assert kept.active is (at == "end")


def test_where_it_cannot_be_kept_awake_a_run_goes_on_only_where_that_is_accepted(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setattr(awake, "need", lambda module, purpose: fake_keep(active=False))
    with pytest.raises(UsageError, match="--accept-sleep"), keep_awake(accept_sleep=False):
        pytest.fail("it went on")
    with keep_awake(accept_sleep=True) as kept:
        assert not kept.active
    assert "THE COMPUTER MAY FALL ASLEEP" in str(kept)


def test_without_the_package_it_says_how_to_get_it(monkeypatch: pytest.MonkeyPatch) -> None:
    def need(module: str, purpose: str) -> object:
        raise PackageMissing("wakepy", purpose=purpose, extra="night")

    monkeypatch.setattr(awake, "need", need)
    with pytest.raises(UsageError, match=r"pip install 'ramprig\[night\]'"), keep_awake(accept_sleep=False):
        pytest.fail("it went on")
    with keep_awake(accept_sleep=True) as kept:
        assert "wakepy is not installed" in str(kept)


def test_the_real_package_has_what_is_used_of_it(monkeypatch: pytest.MonkeyPatch) -> None:
    pytest.importorskip("wakepy")
    monkeypatch.setenv("WAKEPY_FAKE_SUCCESS", "1")
    with keep_awake(accept_sleep=False) as kept:
        assert kept.active
