"""A board that says what no board may say is judged for it: no answer, however wrong, is taken for a bug of ours."""

from __future__ import annotations

import random
from collections.abc import Callable

import pytest

from accept_boards import accepted, mock_port
from ramprig.accept.examine import accept
from ramprig.accept.report import verdict_sentence
from ramprig.accept.trial import Wish
from ramprig.errors import LinkError, LinkLost, UsageError
from ramprig.mock.port import MockPort
from ramprig.port.base import ClosesItself
from ramprig.port.clock import VirtualClock
from ramprig_link.check import seal
from ramprig_link.words import Cause, Trip

Bend = Callable[[list[str]], list[str]]
CHECK_BYTES = len(seal(b"")) - 1


class BentPort(ClosesItself):
    """A port whose board's lines are changed field by field, with the right check."""

    def __init__(self, port: MockPort, bend: Bend) -> None:
        self.name = "bent:"
        self.clock = port.clock
        self._port = port
        self._bend = bend
        self._rest = b""

    def read(self, timeout_s: float) -> bytes:
        *lines, self._rest = (self._rest + self._port.read(timeout_s)).split(b"\n")
        return b"".join(self._bent(line[:-CHECK_BYTES].decode("latin-1").split(" ")) for line in lines)

    def _bent(self, fields: list[str]) -> bytes:
        return seal(" ".join(self._bend(fields)).encode("latin-1", "replace"))

    def write(self, data: bytes) -> None:
        self._port.write(data)

    def urgent(self, data: bytes) -> bool:
        return self._port.urgent(data)

    def send_break(self) -> bool:
        return self._port.send_break()

    def close(self) -> None:
        self._port.close()


def bent(bend: Bend) -> BentPort:
    return BentPort(mock_port(), bend)


@pytest.mark.parametrize(("value", "told"), [(["x"], "'x'"), ([], "''")])
def test_a_limit_that_is_no_number_is_told_with_its_request(value: list[str], told: str) -> None:
    def no_number(fields: list[str]) -> list[str]:
        return [*fields[:3], *value] if fields[1:2] == ["ok"] and fields[3:] == ["24"] else fields

    with pytest.raises(LinkError, match=f"`limit wrong_counts 0` was answered `ok` with {told}, which is no number"):
        accepted(bent(no_number))


def test_a_board_that_refuses_to_tell_a_limit_is_told_so() -> None:
    def refusing(fields: list[str]) -> list[str]:
        return [fields[0], "no", fields[2], "index"] if fields[1:2] == ["ok"] and fields[3:] == ["24"] else fields

    with pytest.raises(LinkError, match="`limit wrong_counts 0` was refused: index"):
        accepted(bent(refusing))


@pytest.mark.parametrize("only", ["packed-log", "plain-log", "log-after-log"])
def test_a_data_line_that_cannot_be_read_fails_by_its_clause(only: str) -> None:
    def cut(fields: list[str]) -> list[str]:
        return [*fields[:-1], fields[-1][:-2] + "?"] if fields[0][0] == "D" else fields

    verdict = accepted(bent(cut), only=only, energise=False)
    assert "DATA-10" in verdict.failed
    assert verdict.exit_code == 1


def test_a_state_that_cannot_be_read_fails_and_the_other_checks_are_made() -> None:
    asked = 0

    def short(fields: list[str]) -> list[str]:
        nonlocal asked
        asked += fields[3:4] == ["off"] and len(fields) > 8
        return fields[:6] if asked == 2 and len(fields) > 8 and fields[3:4] == ["off"] else fields

    verdict = accepted(bent(short), energise=False)
    assert "STATE-1" in verdict.failed
    assert verdict.lost == ""
    assert [result.check.name for result in verdict.results if result.word == "passed"][-1] == "again"


def test_a_trip_of_an_unknown_word_is_judged_as_one_that_must_be_off_at_once() -> None:
    def unheard_of(fields: list[str]) -> list[str]:
        known = fields[0][0] == "N" and fields[3:4] == [Trip.LINK_LOST.word]
        return [*fields[:3], "toothache", *fields[4:]] if known else fields

    verdict = accepted(bent(unheard_of), only="lost-link")
    assert {"S5", "LEASE-2"} <= set(verdict.failed)


@pytest.mark.parametrize("seed", range(12))
def test_whatever_a_board_says_the_acceptance_ends_in_a_verdict_or_cannot_know_the_board(seed: int) -> None:
    drawn = random.Random(seed)
    wrong = ["", "x", "-1", "99999999999", "nan", "stall", "tripped", "armed"]

    def spoilt(fields: list[str]) -> list[str]:
        if drawn.random() > (0.2, 0.02, 0.005)[seed % 3]:
            return fields
        at = drawn.randrange(len(fields))
        return [*fields[:at], drawn.choice(wrong), *fields[at + drawn.randrange(2) :]]

    try:
        verdict = accepted(bent(spoilt), only=("log", "stop", "limits", "arm")[seed % 4])
    except LinkError:
        return
    assert verdict.exit_code in (0, 1, 4)


class OtherPort(ClosesItself):
    """Something else than a board at a port: `answer` makes what comes back of what is sent, `b""` of silence too."""

    def __init__(self, answer: Callable[[bytes], bytes]) -> None:
        self.name = "other:"
        self.clock = VirtualClock()
        self._answer = answer
        self._coming = b""

    def read(self, timeout_s: float) -> bytes:
        self.clock.advance(timeout_s)
        coming, self._coming = self._coming + self._answer(b""), b""
        return coming

    def write(self, data: bytes) -> None:
        self._coming += self._answer(data)

    def urgent(self, data: bytes) -> bool:
        return True

    def send_break(self) -> bool:
        return False

    def close(self) -> None:
        pass


@pytest.mark.parametrize(
    ("answer", "told"),
    [
        (lambda sent: b"", "nothing came at all: is this the port"),
        (lambda sent: sent, "what is sent comes back"),
        (lambda sent: b"U" * 20, "bytes came that are no answer of this protocol: is the rate right"),
        (lambda sent: b"? unknown command\r\n" if sent else b"", "bytes came that are no answer of this protocol"),
    ],
)
def test_what_comes_in_place_of_an_answer_is_told(answer: Callable[[bytes], bytes], told: str) -> None:
    with pytest.raises(LinkLost, match=told):
        accepted(OtherPort(answer))


def test_a_restart_in_the_midst_is_blamed_on_no_clause() -> None:
    port, left = mock_port(), 3

    def restarted(fields: list[str]) -> list[str]:
        nonlocal left
        left -= fields[0][0] == "D"
        if left == 0:
            port.device.restart(Cause.BROWNOUT)
            left = -1
        return fields

    verdict = accept(
        BentPort(port, restarted), Wish(energise=lambda trial: False, only="packed-log"), tell=lambda text: None
    )
    assert list(verdict.failed) == [""]
    assert "the board restarted by itself during this check" in verdict.failed[""][0]
    assert verdict.exit_code == 1


# ---- the verdict -----------------------------------------------------------------------------------------------------


def test_a_cable_pulled_in_the_midst_is_a_lost_link_and_no_broken_clause() -> None:
    port = mock_port()

    def pull(text: str) -> None:
        if text == "passed      exactly-once":
            port.device.faults.set("unplug")

    verdict = accept(port, Wish(energise=lambda trial: True), tell=pull)
    assert verdict.exit_code == 4
    assert "the link was lost: mock: the cable was pulled out" in verdict_sentence(verdict)
    assert "the board could not be left as it was" in verdict.unrestored[0]


def test_some_checks_alone_accept_no_board() -> None:
    sentence = verdict_sentence(accepted(mock_port(), only="late-orders"))
    assert sentence == (
        "ramprig-mock MOCK-0001 passed the checks with 'late-orders' in their name. All are needed to be accepted."
    )


def test_a_name_that_no_check_has_is_refused_before_anything_is_asked() -> None:
    with pytest.raises(UsageError, match="no check has this in its name"):
        accepted(mock_port(), only="overcurrant")


def test_a_board_whose_limits_are_not_put_back_is_not_accepted() -> None:
    verdict = accepted(mock_port(), energise=False, only="identity")
    assert verdict.exit_code == 0
    verdict.unrestored = ["limit wrong_counts 0 is not what it was: 24"]
    assert verdict.exit_code == 1
    assert verdict_sentence(verdict) == "NOT ACCEPTED: ramprig-mock MOCK-0001: it is not left as it was found."
