"""README.md and the guides tell the truth: every command in it is run, and prints what stands there."""

from __future__ import annotations

import re
import shutil
from pathlib import Path

import pytest
from dev import readme_console

from ramprig.bench import load_bench
from ramprig.cautions import CAUTIONS
from ramprig.sequence.compile import compile_plan
from ramprig.sequence.reading import read_sequence

TEXT = readme_console.README.read_text("utf-8")


@pytest.mark.process
@pytest.mark.skipif(shutil.which("bash") is None, reason="README's commands are run by bash, which is not here")
@pytest.mark.parametrize("guide", readme_console.GUIDES, ids=lambda guide: guide.name)
def test_every_console_command_prints_what_stands_below_it(guide: Path) -> None:
    text = guide.read_text("utf-8")
    assert len(re.findall(r"^\$ ", text, re.MULTILINE)) >= 9
    assert "\n".join(readme_console.differences(text)) == ""


def test_commands_in_other_blocks_are_the_two_that_other_tests_run() -> None:
    """`demo.py` is run by test_scripts_demo; `test.py` runs this."""
    blocks = re.findall(r"^```sh\n(.*?)^```$", TEXT, re.MULTILINE | re.DOTALL)
    lines = [line.partition("#")[0].strip() for block in blocks for line in block.splitlines()]
    assert lines == ["python3 scripts/demo.py", "python3 scripts/test.py"]


def test_the_sequence_in_the_text_compiles(tmp_path: Path) -> None:
    (block,) = re.findall(r"^```yaml\n(.*?)^```$", TEXT, re.MULTILINE | re.DOTALL)
    for name in ("vent_bench.yaml", "latch_check.yaml"):
        shutil.copy(readme_console.ROOT / "scripts" / name, tmp_path)
    (tmp_path / "text.yaml").write_text(block, "utf-8")
    sequence = read_sequence(tmp_path / "text.yaml")
    assert compile_plan(sequence, load_bench(tmp_path / "vent_bench.yaml")).totals.reversals == 3


def test_a_changed_output_is_noticed() -> None:
    text = "```console\n$ echo one\ntwo\n```\n"
    assert len(readme_console.differences(text)) == 1
    assert readme_console.renewed(text) == "```console\n$ echo one\none\n```\n"


def test_the_cautions_are_the_ones_the_program_shows() -> None:
    plain = " ".join(TEXT.split())
    for caution in CAUTIONS:
        assert " ".join(caution.split()) in plain
