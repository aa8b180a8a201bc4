"""The commands that open no device: ports, read, schema, and check of bench files."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from ramprig.cli import main
from ramprig.cli.ports import NONE_THERE, listing, quoted
from ramprig.port.clock import VirtualClock
from ramprig.port.find import PortSeen
from ramprig.record.folder import RunDescription, RunFolder
from ramprig.record.manifest import Anchor, RunEnd
from ramprig.record.recorder import Recorder
from ramprig.session.gaps import Accounting, Gap, GapReason
from ramprig.yamlfile import Mapping, Scalar, load_text
from record_samples import TICK_US, blocks_of, vent_columns

PERIOD_TICKS = 2
BENCH = Path(__file__).resolve().parent.parent / "scripts" / "vent_bench.yaml"


# ---- ports ---------------------------------------------------------------------------------------------------------


def test_each_port_is_told_with_the_keys_for_a_bench_file() -> None:
    ports = [
        PortSeen("/dev/ttyUSB0", serial_number="A50285BI", location="1-1.4:1.0", description="FT232R USB UART"),
        PortSeen("/dev/ttyUSB1", serial_number="0001", location="1-1.3"),
        PortSeen("/dev/ttyS0"),
    ]
    assert listing(ports) == [
        "/dev/ttyUSB0  FT232R USB UART",
        "    port: {usb serial: A50285BI}   the same adapter wherever it is plugged in",
        '    port: {usb path: "1-1.4:1.0"}   whatever is plugged in there',
        "/dev/ttyUSB1",
        '    port: {usb serial: "0001"}   the same adapter wherever it is plugged in',
        '    port: {usb path: "1-1.3"}   whatever is plugged in there',
        "/dev/ttyS0",
        "    port: {url: /dev/ttyS0}",
    ]


def test_what_is_told_of_a_port_is_taken_by_a_bench_file(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    text = BENCH.read_text("utf-8")
    start, end = text.index("port:\n"), text.index("\nboard:")
    line = listing([PortSeen("/dev/ttyUSB1", serial_number="0001")])[1].strip().split("   ")[0]
    path = tmp_path / "bench.yaml"
    path.write_text(text[:start] + line + text[end:], "utf-8")
    assert main(["check", str(path)]) == 0
    assert "usb:0001" in capsys.readouterr().out


@pytest.mark.parametrize("text", ["A50285BI", "0001", "1e5", "no", 'a"b\\c', "a: b", "#1", ""])
def test_what_stands_for_a_text_is_read_as_that_text(text: str) -> None:
    entry = load_text("key: " + quoted(text), "x.yaml")
    assert isinstance(entry, Mapping)
    assert isinstance(value := entry.entries[0].value, Scalar)
    assert value.text == text


def test_no_port_is_told_with_what_to_do() -> None:
    assert listing([]) == NONE_THERE.splitlines()


def test_ports_ends_with_0(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["ports"]) == 0
    assert capsys.readouterr().out


# ---- schema and check ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", ["bench", "sequence"])
def test_the_schema_is_json(kind: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["schema", kind]) == 0
    schema = json.loads(capsys.readouterr().out)
    assert schema["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    assert kind in schema["title"]


def test_check_tells_what_a_bench_file_means(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["check", str(BENCH)]) == 0
    said = capsys.readouterr().out
    assert "vent: 16 lines x4 x gear 90 = 5760 counts per output turn" in said


def test_check_goes_on_after_a_file_that_is_refused(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    wrong = tmp_path / "wrong.yaml"
    wrong.write_text(BENCH.read_text("utf-8").replace("duty: 80 %", "duty: 80"), "utf-8")
    assert main(["check", str(tmp_path / "absent.yaml"), str(wrong), str(BENCH)]) == 2
    said = capsys.readouterr()
    assert "absent.yaml" in said.err
    assert f"{wrong}:" in said.err
    assert "duty: 80" in said.err
    assert "greenhouse vent drive" in said.out


# ---- read ----------------------------------------------------------------------------------------------------------


def written_run(root: Path, *, finish: bool = True, lost: int = 0) -> Path:
    """A small run folder of 100 samples, as a test run would leave it."""
    clock = VirtualClock(wall_s=1_767_225_600.0)
    description = RunDescription(name="vent check", port="mock:", identity={"board": "ramprig-mock", "serial": "7"})
    folder = RunFolder.create(root, description, started_unix_s=clock.wall(), short_id="abc")
    blocks = blocks_of(100)
    first = int(blocks[0].ticks[0])
    start = Anchor(first, clock.now(), clock.wall())
    recorder = Recorder(
        folder, vent_columns(), start=start, tick_us=TICK_US, clock=clock, on_trouble=lambda _: None, threaded=False
    )
    for block in blocks:
        recorder.on_block(block)
    clock.advance(0.2)
    gaps = (Gap(first + 100 * PERIOD_TICKS, lost, PERIOD_TICKS, GapReason.NOT_KEPT),) if lost else ()
    account = Accounting(
        first_tick=first, period_ticks=PERIOD_TICKS, expected=100 + lost, received=100, lost=lost, gaps=gaps,
        gaps_unlisted=0, made=100 + lost, asked_again=lost, recovered=0, duplicates=0, strange_lines=0,
    )  # fmt: skip
    if finish:
        recorder.finish(RunEnd(verdict="passed", stop_reason="the sequence came to its end", accounts=[account]))
    else:
        recorder._submit_batch()
        recorder._writer.close()
        for file in (recorder._samples, recorder._events):
            file.close()
    return folder.path


def test_read_tells_verdict_reason_and_account(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = written_run(tmp_path)
    assert main(["read", str(path)]) == 0
    assert capsys.readouterr().out.splitlines() == [
        "run      20260101T000000Z-vent-check-abc",
        "name     vent check",
        "started  2026-01-01T00:00:00.000Z",
        "ended    2026-01-01T00:00:00.200Z",
        "port     mock:",
        "board    ramprig-mock 7",
        "verdict  passed",
        "reason   the sequence came to its end",
        "samples  100 expected, 100 received, 0 lost, 100 written; 100 rows in the file",
        "checked  every sample is in the file or told as lost, and no file was changed",
    ]


def test_read_lists_what_was_lost(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = written_run(tmp_path, lost=5)
    assert main(["read", str(path)]) == 0
    said = capsys.readouterr().out
    assert "105 expected, 100 received, 5 lost" in said
    assert "lost: 5 from tick " in said


def test_read_ends_with_2_where_a_row_is_gone(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = written_run(tmp_path)
    rows = (path / "samples.csv").read_bytes().splitlines(keepends=True)
    (path / "samples.csv").write_bytes(b"".join(rows[:50] + rows[51:]))
    assert main(["read", str(path)]) == 2
    said = capsys.readouterr().out
    assert "1 samples are missing that were received" in said
    assert "samples.csv was changed after the run" in said


def test_read_ends_with_2_for_a_run_that_broke_off(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = written_run(tmp_path, finish=False)
    assert main(["read", str(path)]) == 2
    said = capsys.readouterr().out
    assert "ended    not in order" in said
    assert "100 rows in the file" in said
    assert "the run did not end in order" in said


def test_read_of_what_is_no_run_folder_ends_with_2(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["read", str(tmp_path)]) == 2
    assert "is no run folder" in capsys.readouterr().err


# ---- mistakes of a command line ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("line", "said"),
    [
        (["chek", "a.yaml"], "there is no command 'chek'; did you mean 'check'?"),
        (["xyzzy"], "there is no command 'xyzzy'; there are check, rehearse,"),
        (["export", ".", "--to", "csv"], "(choose from 'parquet', 'excel-csv', 'mdf4')"),
        (["export", ".", "--to", "excel-csv", "--decimal", "dot"], "(choose from 'point', 'comma')"),
    ],
)
def test_a_wrong_word_of_a_command_line_is_answered_with_the_right_ones(
    line: list[str], said: str, capsys: pytest.CaptureFixture[str]
) -> None:
    with pytest.raises(SystemExit) as ended:
        main(line)
    assert ended.value.code == 2
    message = capsys.readouterr().err
    assert said.replace("'", "") in message.replace("'", "")  # Python 3.12 and later quote choices otherwise


def test_a_bench_where_a_sequence_is_wanted_is_told_and_the_other_way_round(
    capsys: pytest.CaptureFixture[str],
) -> None:
    sequence = BENCH.parent / "jog_check.yaml"
    assert main(["rehearse", str(BENCH)]) == 2
    assert f"{BENCH} is a bench file; a sequence is wanted here" in capsys.readouterr().err
    assert main(["check", "--bench", str(sequence), str(sequence)]) == 2
    assert f"--bench {sequence}: this is a sequence; a bench file is wanted" in capsys.readouterr().err


def test_check_refuses_a_fault_that_the_mock_does_not_know(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "b.yaml"
    path.write_text(BENCH.read_text("utf-8").replace("faults: []", "faults: [jamed_shaft]"), encoding="utf-8")
    assert main(["check", str(path)]) == 2
    assert "there is no fault 'jamed_shaft'; did you mean 'jammed_shaft'?" in capsys.readouterr().err
