"""The ledger keeps every result once, by content and terms, and finds it again."""

import sqlite3
from dataclasses import replace
from pathlib import Path

import pytest

from moire import ledger as room
from moire.errors import OutputRefused
from moire.ledger import Ledger, Stamp, terms_key
from moire.outcome import Outcome, Terms, failed

HERE = Stamp(size=10, modified_ns=1)


def outcome(path: str, content: str, **more: object) -> Outcome:
    return replace(failed(path, "", Terms(), sha256=content), **more)  # type: ignore[arg-type]


def test_a_result_is_found_by_place_and_by_content(tmp_path: Path) -> None:
    with Ledger(tmp_path / "l.sqlite") as ledger:
        run = ledger.begin("/a", at="")
        ledger.record(run, outcome("/a/1.png", "c1", verdict="rescan"), HERE, Terms())
        known = ledger.recall("/a/1.png", HERE, Terms())
        assert known is not None
        assert (known.content, known.verdict) == ("c1", "rescan")
        assert ledger.recall("/a/1.png", replace(HERE, modified_ns=2), Terms()) is None
        assert ledger.recall("/a/1.png", HERE, Terms(viewing="print")) is None
        assert ledger.may_hold(HERE)
        assert not ledger.may_hold(replace(HERE, size=11))
        assert ledger.recall_content("c1", Terms()) is not None
        assert ledger.recall_content("c1", Terms(visible_from=2.0)) is None


def test_one_content_at_two_places_is_two_files(tmp_path: Path) -> None:
    with Ledger(tmp_path / "l.sqlite") as ledger:
        run = ledger.begin("/a", at="")
        ledger.record(run, outcome("/a/1.png", "c1"), HERE, Terms())
        ledger.see(run, "/a/copy.png", HERE, "c1", Terms())
        assert [(o.path, o.file) for o in ledger.outcomes(run)] == [
            ("/a/1.png", "1.png"),
            ("/a/copy.png", "copy.png"),
        ]


def test_a_changed_file_is_one_file(tmp_path: Path) -> None:
    with Ledger(tmp_path / "l.sqlite") as ledger:
        run = ledger.begin("/a", at="")
        for content in ("c1", "c2", "c2"):
            ledger.record(run, outcome("/a/1.png", content), HERE, Terms())
        assert [o.sha256 for o in ledger.outcomes(run)] == ["c2"]


def test_the_worst_come_first(tmp_path: Path) -> None:
    with Ledger(tmp_path / "l.sqlite") as ledger:
        run = ledger.begin("/a", at="")
        for i, (verdict, visibility) in enumerate(
            [("sound", 0.9), ("rescan", 2.0), ("mendable", 90.0), ("rescan", 5.0), ("unreadable", 0.0)]
        ):
            found = outcome(f"/a/{i}", f"c{i}", verdict=verdict, visibility=visibility)
            ledger.record(run, found, HERE, Terms())
        assert [o.file for o in ledger.worst(run, 4)] == ["4", "3", "1", "2"]
        assert ledger.tally(run) == {
            ("", "sound"): 1,
            ("", "rescan"): 2,
            ("", "mendable"): 1,
            ("", "unreadable"): 1,
        }


def test_an_older_ledger_is_brought_up_to_date(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "l.sqlite"
    everything = room.MIGRATIONS
    monkeypatch.setattr(room, "MIGRATIONS", everything[:1])
    Ledger(path).__exit__()
    db = sqlite3.connect(path)
    db.execute("INSERT INTO files VALUES ('/a/1.png', 10, 1, 'c1', ?, 1)", (terms_key(Terms()),))
    db.execute(
        "INSERT INTO results VALUES ('c1', ?, 'sound', 0, 0.5, '', 1.0, '', 'moire 0', x'7b7d')",
        (terms_key(Terms()),),
    )
    db.commit()
    db.close()
    monkeypatch.setattr(room, "MIGRATIONS", everything)
    with Ledger(path) as ledger:
        known = ledger.recall("/a/1.png", HERE, Terms())
        assert known is not None
        assert known.verdict == "sound"
    db = sqlite3.connect(path)
    assert db.execute("PRAGMA user_version").fetchone() == (len(everything),)
    db.close()


def test_a_later_ledger_and_other_files_are_refused(tmp_path: Path) -> None:
    path = tmp_path / "l.sqlite"
    db = sqlite3.connect(path)
    db.execute("PRAGMA user_version = 99")
    db.close()
    with pytest.raises(OutputRefused, match=r"l\.sqlite: is a ledger of version 99"):
        Ledger(path)
    other = tmp_path / "other.sqlite"
    db = sqlite3.connect(other)
    db.execute("CREATE TABLE songs (title TEXT)")
    db.close()
    with pytest.raises(OutputRefused, match="something else"):
        Ledger(other)
    text = tmp_path / "notes.txt"
    text.write_text("not a database at all")
    with pytest.raises(OutputRefused, match="is not a ledger"):
        Ledger(text)
    assert text.read_text() == "not a database at all"
    with pytest.raises(OutputRefused, match="cannot be used"):
        Ledger(tmp_path / "no" / "such" / "l.sqlite")


def test_it_is_a_wal_database(tmp_path: Path) -> None:
    with Ledger(tmp_path / "l.sqlite"):
        db = sqlite3.connect(tmp_path / "l.sqlite")
        assert db.execute("PRAGMA journal_mode").fetchone() == ("wal",)
        assert db.execute("PRAGMA integrity_check").fetchone() == ("ok",)
        db.close()


def test_one_run_at_a_time_holds_a_ledger(tmp_path: Path) -> None:
    path = tmp_path / "l.sqlite"
    with Ledger(path), pytest.raises(OutputRefused, match="in use by another run"):
        Ledger(path)
    with Ledger(path):
        pass


def test_a_ledger_that_cannot_be_written_is_told_of(tmp_path: Path) -> None:
    path = tmp_path / "l.sqlite"
    with Ledger(path) as ledger:
        run = ledger.begin("/a", at="")
        ledger.record(run, outcome("/a/1.png", "c1"), HERE, Terms())
        # As a full disk would: SQLite may not grow the file any more.
        ledger._db.execute("PRAGMA max_page_count = 1")
        large = outcome("/a/2.png", "c2", advice=("x" * 200_000,))
        with pytest.raises(OutputRefused, match=r"database or disk is full.*run again"):
            ledger.record(run, large, HERE, Terms())
        assert [o.file for o in ledger.outcomes(run)] == ["1.png"]
