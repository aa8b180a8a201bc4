"""A samples file read in pieces says what it says when read whole, and what is no samples file is refused."""

from __future__ import annotations

import csv
import io
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramprig.errors import RecordError
from ramprig.record.reading import read_samples
from ramprig.record.rows import RowPrinter
from ramprig.record.scan import Scan, read_ticks
from record_samples import TICK_US, blocks_of, vent_columns


def written(folder: Path, samples: int = 700, *, torn: bytes = b"") -> Path:
    printer = RowPrinter(vent_columns(), tick_us=TICK_US, tick_zero=4000)
    path = folder / "samples.csv"
    path.write_bytes(printer.header() + printer.rows(blocks_of(samples)) + torn)
    return path


@pytest.mark.parametrize("piece_bytes", [200, 3001, 10**6])
def test_pieces_of_any_size_hold_what_the_whole_file_holds(tmp_path: Path, piece_bytes: int) -> None:
    path = written(tmp_path, torn=b"99999,1.0")
    whole = read_samples(path)
    scan = Scan(path, piece_bytes=piece_bytes)
    pieces = list(scan)
    assert np.array_equal(np.concatenate([piece.ticks for piece in pieces]), whole.ticks)
    for name, column in whole.numbers.items():
        assert np.array_equal(np.concatenate([piece.numbers[name] for piece in pieces]), column, equal_nan=True)
    assert [text for piece in pieces for text in piece.words["state"].tolist()] == whole.words["state"]
    assert scan.torn_bytes == len(b"99999,1.0")
    assert len(pieces) == 1 or piece_bytes < 10**6
    assert np.array_equal(read_ticks(path)[0], whole.ticks)


def test_only_the_columns_that_are_wanted_are_read(tmp_path: Path) -> None:
    piece = next(iter(Scan(written(tmp_path), columns=["supply_v"])))
    assert set(piece.numbers) == {"supply_v"}
    assert piece.words == {}


def test_the_tail_holds_the_last_whole_rows(tmp_path: Path) -> None:
    path = written(tmp_path, torn=b"12,")
    whole = read_samples(path)
    tail = Scan(path).tail(3000)
    assert 20 < len(tail) < 100
    assert np.array_equal(tail.ticks, whole.ticks[-len(tail) :])
    assert len(Scan(path).tail()) == len(whole)


texts = st.one_of(
    st.just(""),
    st.decimals(allow_nan=False, allow_infinity=False, places=3, min_value=-(10**6), max_value=10**6).map(str),
    st.integers(-(10**18), 10**18).map(str),
    st.floats(allow_nan=False, allow_infinity=False).map(repr),
)


@given(st.lists(texts, min_size=1, max_size=30), st.booleans())
def test_every_number_is_the_one_that_float_reads(fields: list[str], quoted: bool) -> None:
    out = io.StringIO(newline="")
    rows = csv.writer(out, quoting=csv.QUOTE_ALL if quoted else csv.QUOTE_MINIMAL)
    rows.writerow(["tick", "a", "b"])
    rows.writerows([[number, text, text[:4]] for number, text in enumerate(fields) if text[:4].count("e") == 0])
    kept = [text for text in fields if text[:4].count("e") == 0]
    path = Path(io_folder) / "samples.csv"
    path.write_text(out.getvalue(), encoding="utf-8", newline="")
    try:
        wanted = [float(text[:4]) if text else np.nan for text in kept]
    except ValueError:
        wanted = None
    if wanted is None:
        with pytest.raises(RecordError):
            list(Scan(path))
        return
    found = [number for piece in Scan(path) for number in piece.numbers["a"].tolist()]
    assert np.array_equal(found, [float(text) if text else np.nan for text in kept], equal_nan=True)
    assert np.array_equal(
        [number for piece in Scan(path) for number in piece.numbers["b"].tolist()], wanted, equal_nan=True
    )


io_folder = ""


@pytest.fixture(autouse=True, scope="module")
def a_folder(tmp_path_factory: pytest.TempPathFactory) -> None:
    global io_folder
    io_folder = str(tmp_path_factory.mktemp("scan"))


@pytest.mark.parametrize(
    ("content", "found"),
    [
        (b"", "first column is not tick"),
        (b"time,a\r\n1,2\r\n", "first column is not tick"),
        (b"tick,a\r\n1,2\r\n2\r\n", "not as many fields"),
        (b"tick,a\r\n1\r\n2,3,4\r\n", "not as many fields"),
        (b"tick,a\r\nx,2\r\n", "column tick"),
        (b"tick,a\r\n1,x\r\n", "column a"),
        (b'tick,a\r\n1,"x"\r\n', "could not convert"),
    ],
)
def test_what_is_no_samples_file_is_refused(tmp_path: Path, content: bytes, found: str) -> None:
    path = tmp_path / "samples.csv"
    path.write_bytes(content)
    with pytest.raises(RecordError, match=found):
        list(Scan(path))
    with pytest.raises(RecordError):
        list(Scan(tmp_path / "absent.csv"))
