"""What a run is exported to reads back equal through the readers of the libraries it is meant for."""

from __future__ import annotations

import csv
import io
import sys
from pathlib import Path

import numpy as np
import pytest

from explain_cases import Case, run_case
from ramprig.cli.main import main
from ramprig.errors import PackageMissing, RecordError, UsageError
from ramprig.record import export
from ramprig.record.export import Mark, To, export_run
from ramprig.record.reading import Samples, read_samples


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    result, _ = run_case(tmp_path_factory.mktemp("run"), Case("", duty=-50, hold_ms=1500), seed=5)
    assert result.folder is not None
    with open(result.folder / "samples.csv", "ab") as file:
        file.write(b"999999,12")  # a torn last row
    return result.folder


@pytest.fixture(scope="module")
def whole(run: Path) -> Samples:
    return read_samples(run / "samples.csv")


def test_parquet_reads_back_equal(run: Path, whole: Samples, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    parquet = pytest.importorskip("pyarrow.parquet", reason="needs the package pyarrow")
    monkeypatch.setattr(export, "PIECE_BYTES", 5000)  # several row groups
    (done,) = export_run(run, To.PARQUET, out=tmp_path)
    assert done.rows == len(whole)
    file = parquet.ParquetFile(done.path)
    assert file.num_row_groups > 3
    table = file.read()
    assert table.column_names == list(whole.names)
    assert np.array_equal(table["tick"].to_numpy(), whole.ticks)
    for name, column in whole.numbers.items():
        found = np.array(table[name].to_pylist(), dtype=float)  # None becomes NaN
        assert np.array_equal(found, column, equal_nan=True), name
    assert table["state"].to_pylist() == whole.words["state"]
    assert table.schema.field("vent.current_a").metadata == {b"unit": b"A"}
    file.close()


@pytest.mark.filterwarnings("ignore::DeprecationWarning:asammdf", "ignore::DeprecationWarning:pandas")
def test_mdf_reads_back_equal(run: Path, whole: Samples, tmp_path: Path) -> None:
    asammdf = pytest.importorskip("asammdf", reason="needs the package asammdf")
    (done,) = export_run(run, To.MDF4, out=tmp_path)
    assert done.path.name == "samples.mf4"
    assert [path.name for path in tmp_path.iterdir()] == ["samples.mf4"]
    with asammdf.MDF(done.path) as file:
        for name, column in whole.numbers.items():
            if name == "time_s":
                continue
            signal = file.get(name)
            assert np.array_equal(signal.samples.astype(float), column, equal_nan=True), name
            assert np.array_equal(signal.timestamps, whole.numbers["time_s"])
        assert np.array_equal(file.get("tick").samples, whole.ticks)
        assert [bytes(text).decode("utf-8") for text in file.get("state").samples] == whole.words["state"]
        assert file.get("supply_v").unit == "V"


@pytest.mark.parametrize(("mark", "comma", "delimiter"), [(Mark.POINT, ".", "\t"), (Mark.COMMA, ",", ";")])
def test_spreadsheet_text_reads_back_equal_and_splits(
    run: Path, whole: Samples, tmp_path: Path, mark: Mark, comma: str, delimiter: str
) -> None:
    done = export_run(run, To.EXCEL_CSV, out=tmp_path, mark=mark, sheet_rows=101)
    assert len(done) == -(-len(whole) // 100)
    assert sum(file.rows for file in done) == len(whole)
    rows: list[list[str]] = []
    for file in done:
        data = file.path.read_bytes()
        assert data.startswith(b"\xff\xfe")
        table = list(csv.reader(io.StringIO(data.decode("utf-16"), newline=""), delimiter=delimiter))
        assert table[0] == list(whole.names)
        assert len(table) <= 101
        rows += table[1:]
    for place, name in enumerate(whole.names):
        texts = [row[place] for row in rows]
        if name in whole.words:
            assert texts == whole.words[name]
            continue
        numbers = [float(text.replace(comma, ".")) if text else np.nan for text in texts]
        wanted = whole.ticks.astype(float) if name == "tick" else whole.numbers[name]
        assert np.array_equal(numbers, wanted, equal_nan=True), name


def test_a_log_that_fits_one_sheet_stays_one_file(run: Path, whole: Samples, tmp_path: Path) -> None:
    assert len(export_run(run, To.EXCEL_CSV, out=tmp_path, sheet_rows=len(whole) + 1)) == 1
    assert len(export_run(run, To.EXCEL_CSV, out=tmp_path, sheet_rows=len(whole))) == 2
    with pytest.raises(UsageError, match="header and a row"):
        export_run(run, To.EXCEL_CSV, out=tmp_path, sheet_rows=1)


def test_an_export_leaves_the_run_as_it_was(run: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    before = {path.name: path.read_bytes() for path in run.iterdir()}
    assert main(["export", str(run), "--to", "excel-csv", "--out", str(tmp_path), "--decimal", "comma"]) == 0
    assert "samples-excel.csv" in capsys.readouterr().out
    assert {path.name: path.read_bytes() for path in run.iterdir()} == before


@pytest.mark.parametrize("words", [["export", "--to", "excel-csv"], ["report"]])
def test_where_nothing_can_be_written_another_place_is_named(
    run: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], words: list[str]
) -> None:
    taken = tmp_path / "taken"
    taken.write_text("a file where a folder is wanted", "utf-8")
    assert main([*words, str(run), "--out", str(taken)]) == 2
    assert f"cannot be written in {taken}: " in (said := capsys.readouterr().err)
    assert said.endswith("; --out DIR puts it elsewhere\n")


def test_a_missing_package_is_named_and_leaves_no_file(
    run: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    for to, package in ((To.PARQUET, "pyarrow"), (To.MDF4, "asammdf")):
        monkeypatch.setitem(sys.modules, package, None)  # as if it were not installed
        with pytest.raises(PackageMissing, match=rf"pip install {package}, or pip install 'ramprig\[export\]'"):
            export_run(run, to, out=tmp_path)
    assert list(tmp_path.iterdir()) == []


def test_a_broken_log_leaves_no_part_of_an_export(run: Path, tmp_path: Path) -> None:
    pytest.importorskip("pyarrow", reason="needs the package pyarrow")
    broken = tmp_path / "run"
    broken.mkdir()
    for name in ("run.json", "samples.csv"):
        (broken / name).write_bytes((run / name).read_bytes())
    with open(broken / "samples.csv", "ab") as file:
        file.write(b"\r\n1,2\r\n")
    with pytest.raises(RecordError, match="not as many fields"):
        export_run(broken, To.PARQUET, out=tmp_path / "out")
    assert list((tmp_path / "out").iterdir()) == []
