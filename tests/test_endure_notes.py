"""Notes by hand: kept with the time, photos copied and hashed, while the run is on and after it, whatever crashes."""

from __future__ import annotations

from pathlib import Path

import pytest

from endure_crash import Host, Process
from ramprig.endure.notes import TEXT_MAX, add_note
from ramprig.errors import RecordError, UsageError
from ramprig.record.reading import audit, read_notes, run_events

NOW_S = 1_800_000_002.5


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """A finished run."""
    host = Host(tmp_path)
    host.run(Process())
    return host.run_folder


def test_a_note_is_among_the_events_in_its_place(folder: Path, tmp_path: Path) -> None:
    photo = tmp_path / "Brush 1.JPG"
    photo.write_bytes(b"\xff\xd8 a photo")
    note = add_note(folder, " brush length 4.2 mm ", unix_s=NOW_S, by="AN", photos=[photo])
    assert (note.number, note.photos) == (1, ("note-1-1.jpg",))
    assert (folder / "note-1-1.jpg").read_bytes() == photo.read_bytes()
    kinds = [event["kind"] for event in run_events(folder)]
    assert 0 < kinds.index("operator_note") < len(kinds) - 1
    (kept,) = read_notes(folder)
    assert (kept["text"], kept["by"], kept["utc"]) == ("brush length 4.2 mm", "AN", "2027-01-15T08:00:02.500Z")
    assert kept["time_s"] == pytest.approx(NOW_S - 1_800_000_000, abs=1.0)
    assert audit(folder).exact


def test_a_changed_photo_is_found(folder: Path, tmp_path: Path) -> None:
    photo = tmp_path / "p.png"
    photo.write_bytes(b"one")
    add_note(folder, "noise", unix_s=NOW_S, photos=[photo, photo])
    (folder / "note-1-2.png").write_bytes(b"two")
    assert audit(folder).statements == ("note-1-2.png was changed after the run",)


def test_a_torn_last_note_is_left_out_and_the_next_one_begins_anew(folder: Path, tmp_path: Path) -> None:
    add_note(folder, "first", unix_s=NOW_S)
    path = folder / "notes.jsonl"
    path.write_bytes(path.read_bytes() + b'{"tick":null,"utc":"20')
    (folder / "note-2-1.png").write_bytes(b"of a note that a crash has lost")
    photo = tmp_path / "p.png"
    photo.write_bytes(b"one")
    note = add_note(folder, "second", unix_s=NOW_S + 1, photos=[photo])
    assert note.photos == ("note-2-1-2.png",)
    assert [kept["text"] for kept in read_notes(folder)] == ["first", "second"]


@pytest.mark.parametrize("text", ["", "  ", "x" * (TEXT_MAX + 1)])
def test_a_note_without_a_text_or_with_a_book_is_refused(folder: Path, text: str) -> None:
    with pytest.raises(UsageError, match="characters"):
        add_note(folder, text, unix_s=NOW_S)
    assert read_notes(folder) == []


def test_a_photo_that_is_not_there_keeps_nothing(folder: Path, tmp_path: Path) -> None:
    with pytest.raises(UsageError, match="cannot be read"):
        add_note(folder, "noise", unix_s=NOW_S, photos=[tmp_path / "none.jpg"])
    assert read_notes(folder) == []
    with pytest.raises(RecordError, match="no run folder"):
        add_note(tmp_path, "noise", unix_s=NOW_S)


def test_notes_are_taken_while_the_run_is_on_and_its_account_still_holds(tmp_path: Path) -> None:
    host = Host(tmp_path)
    taken: list[int] = []

    def meddle(host: Host) -> None:
        if host.record_exists() and not taken:
            taken.append(add_note(host.run_folder, "a new noise", unix_s=host.now_unix_s()).number)

    host.meddle = meddle
    host.run(Process())
    assert taken == [1]
    assert audit(host.run_folder).exact
