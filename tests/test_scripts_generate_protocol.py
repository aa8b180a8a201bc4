"""words.py, words.h, words.vh and the tables of SPEC.md are what protocol.toml gives."""

from __future__ import annotations

import re
import shutil
import subprocess
import tomllib
from pathlib import Path

import pytest
from dev import generate_protocol, protocol_tables

from ramprig_link import words

ROOT = Path(__file__).resolve().parent.parent


def test_the_committed_files_are_what_the_generator_makes() -> None:
    assert [str(path.relative_to(ROOT)) for path in generate_protocol.stale()] == []


def test_check_says_so_where_a_file_is_stale(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    copy = tmp_path / "words.py"
    copy.write_text(generate_protocol.PYTHON.read_text("utf-8") + "\n", "utf-8")
    monkeypatch.setattr(generate_protocol, "PYTHON", copy)
    monkeypatch.setattr(generate_protocol, "ROOT", tmp_path)
    assert generate_protocol.main(["--check"]) == 1
    assert generate_protocol.main([]) == 0
    assert generate_protocol.main(["--check"]) == 0


def test_an_unknown_option_is_refused() -> None:
    assert generate_protocol.main(["--chek"]) == 2


def test_a_mark_that_names_no_table_is_an_error() -> None:
    with pytest.raises(KeyError):
        protocol_tables.with_tables("<!-- table colours -->\n<!-- end -->", {})


def test_every_table_of_the_protocol_stands_in_the_spec() -> None:
    text = (ROOT / "protocol" / "SPEC.md").read_text("utf-8")
    marks = set(re.findall(r"<!-- table (\w+) -->", text))
    source = tomllib.loads(generate_protocol.SOURCE.read_text("utf-8"))
    assert marks == set(source) - {"version"}


@pytest.mark.skipif(shutil.which("cc") is None, reason="no C compiler here")
def test_the_header_compiles_and_its_tables_agree_with_python(tmp_path: Path) -> None:
    program = tmp_path / "tables.c"
    program.write_text(
        '#include <stdio.h>\n#include "words.h"\n'
        "int main(void) {\n"
        '#define X(NAME, word, num, per, lo, hi, def, way) printf("%s %d %ld %ld %ld\\n", word, RR_LIMIT_##NAME, '
        "(long)(lo), (long)(hi), (long)(def));\n"
        "    RR_LIMIT_LIST(X)\n#undef X\n"
        '#define X(NAME, word, kinds, states) printf("%s %d\\n", word, RR_WORD_##NAME);\n'
        "    RR_WORD_LIST(X)\n#undef X\n"
        "    return 0;\n}\n",
        "utf-8",
    )
    binary = tmp_path / "tables"
    strict = ["-std=c11", "-Wall", "-Wextra", "-Wpedantic", "-Wconversion", "-Wshadow", "-Werror"]
    include = ["-I", str(generate_protocol.HEADER.parent)]
    subprocess.run(["cc", *strict, *include, str(program), "-o", str(binary)], check=True)
    printed = subprocess.run([str(binary)], check=True, capture_output=True, text=True).stdout.splitlines()
    limits = [f"{e.name} {e.number} {e.lowest} {e.highest} {e.default}" for e in words.LIMITS.values()]
    assert printed == limits + [f"{name} {number}" for number, name in enumerate(words.WORDS)]
