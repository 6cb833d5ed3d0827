"""The ledger of a batch: what became of every file, in SQLite.

``files`` says where each content was last seen; ``results`` what it was found to be under
which terms. A result is found again by its content, wherever the file has moved. The
database is in WAL mode, and each result is a transaction: a kill loses what was under way.
"""

from __future__ import annotations

import hashlib
import os
import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace

import msgspec

from moire.errors import OutputRefused
from moire.model import Verdict
from moire.outcome import SEVERITY, Outcome, Terms

# One script for each version of the schema, applied in order; never edited, only added to.
MIGRATIONS = (
    """
    CREATE TABLE runs (id INTEGER PRIMARY KEY, folder TEXT NOT NULL, started_at TEXT NOT NULL);
    CREATE TABLE terms (key TEXT PRIMARY KEY, terms TEXT NOT NULL) WITHOUT ROWID;
    CREATE TABLE files (
        path TEXT PRIMARY KEY, size INTEGER NOT NULL, modified_ns INTEGER NOT NULL,
        content TEXT NOT NULL, terms TEXT NOT NULL, run INTEGER NOT NULL
    ) WITHOUT ROWID;
    CREATE TABLE results (
        content TEXT NOT NULL, terms TEXT NOT NULL, verdict TEXT NOT NULL, severity INTEGER NOT NULL,
        visibility REAL NOT NULL, error TEXT NOT NULL, seconds REAL NOT NULL, examined_at TEXT NOT NULL,
        software TEXT NOT NULL, outcome BLOB NOT NULL, PRIMARY KEY (content, terms)
    ) WITHOUT ROWID;
    CREATE INDEX files_by_size ON files (size);
    """,
    """
    ALTER TABLE results ADD COLUMN banding INTEGER NOT NULL DEFAULT 0;
    CREATE INDEX results_with_banding ON results (content) WHERE banding;
    CREATE INDEX files_by_content ON files (content);
    """,
)
_JOINED = "files JOIN results ON results.content = files.content AND results.terms = files.terms"


@dataclass(frozen=True, slots=True, kw_only=True)
class Stamp:
    """A file's size and time of change: the same stamp is the same content."""

    size: int
    modified_ns: int

    @staticmethod
    def of(path: str) -> Stamp:
        """Stamp of a file.

        Raises
        ------
        OSError
        """
        found = os.stat(path)
        return Stamp(size=found.st_size, modified_ns=found.st_mtime_ns)


@dataclass(frozen=True, slots=True, kw_only=True)
class Known:
    """What the ledger holds of a file that need not be examined again."""

    content: str
    verdict: Verdict
    error: str


class Ledger:
    """An open ledger; use it in a ``with`` block.

    Parameters
    ----------
    path : path
        Made if it does not exist. On a local disk: WAL needs shared memory.

    Raises
    ------
    OutputRefused
        If it is no ledger, of a later version, or cannot be written.
    """

    def __init__(self, path: str | os.PathLike[str]) -> None:
        name = self._name = os.fspath(path)
        if os.path.exists(name) and not _is_database(name):
            raise OutputRefused(name, "is not a ledger: give another name to --ledger")
        self._lock = _locked(name)
        try:
            self._db = self._open()
        except BaseException:
            if self._lock is not None:
                os.close(self._lock)
            raise

    def __enter__(self) -> Ledger:
        return self

    def __exit__(self, *_: object) -> None:
        self._db.close()
        if self._lock is not None:
            os.close(self._lock)

    def _open(self) -> sqlite3.Connection:
        try:
            db = sqlite3.connect(self._name, timeout=60, isolation_level=None)
        except sqlite3.Error as error:
            raise OutputRefused(self._name, f"cannot be used as a ledger ({error})") from error
        try:
            db.execute("PRAGMA journal_mode = WAL")
            db.execute("PRAGMA synchronous = NORMAL")
            _migrate(db, self._name)
        except sqlite3.Error as error:
            db.close()
            raise OutputRefused(self._name, f"cannot be used as a ledger ({error})") from error
        except BaseException:
            db.close()
            raise
        return db

    def begin(self, folder: str, *, at: str) -> int:
        """Number of a new run over a folder."""
        row = self._db.execute("INSERT INTO runs (folder, started_at) VALUES (?, ?)", (folder, at))
        return int(row.lastrowid or 0)

    def recall(self, path: str, stamp: Stamp, terms: Terms) -> Known | None:
        """What is known of a file by its path and stamp."""
        row = self._db.execute(
            f"SELECT files.content, verdict, error FROM {_JOINED} "
            "WHERE path = ? AND size = ? AND modified_ns = ? AND files.terms = ?",
            (path, stamp.size, stamp.modified_ns, terms_key(terms)),
        ).fetchone()
        return None if row is None else Known(content=row[0], verdict=row[1], error=row[2])

    def may_hold(self, stamp: Stamp) -> bool:
        """Whether any known file has this size, so that hashing a new one may save its examination."""
        found = self._db.execute("SELECT 1 FROM files WHERE size = ? LIMIT 1", (stamp.size,))
        return found.fetchone() is not None

    def recall_content(self, content: str, terms: Terms) -> Known | None:
        """What is known of a content, wherever it lay."""
        row = self._db.execute(
            "SELECT verdict, error FROM results WHERE content = ? AND terms = ?", (content, terms_key(terms))
        ).fetchone()
        return None if row is None else Known(content=content, verdict=row[0], error=row[1])

    def see(self, run: int, path: str, stamp: Stamp, content: str, terms: Terms) -> None:
        """Note that a run met a file whose result is known."""
        with self._told():
            self._db.execute(
                "INSERT OR REPLACE INTO files VALUES (?, ?, ?, ?, ?, ?)",
                (path, stamp.size, stamp.modified_ns, content, terms_key(terms), run),
            )

    def record(self, run: int, outcome: Outcome, stamp: Stamp, terms: Terms) -> None:
        """Keep an outcome: both rows or none."""
        # A file whose bytes never came has no content; it is known by its place, and tried again.
        content, key = outcome.sha256 or f"unread:{outcome.path}", terms_key(terms)
        banding = any(f.kind == "banding" for f in outcome.findings)
        with self._told():
            self._db.execute("BEGIN IMMEDIATE")
            try:
                self._db.execute("INSERT OR IGNORE INTO terms VALUES (?, ?)", (key, _text(terms)))
                self._db.execute(
                    "INSERT OR REPLACE INTO results VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
                    (
                        content, key, outcome.verdict, SEVERITY[outcome.verdict], outcome.visibility,
                        outcome.error, outcome.seconds, outcome.examined_at, outcome.software,
                        msgspec.json.encode(outcome), banding,
                    ),
                )  # fmt: skip
                self.see(run, outcome.path, stamp, content, terms)
                self._db.execute("COMMIT")
            except BaseException:
                if self._db.in_transaction:
                    self._db.execute("ROLLBACK")
                raise

    @contextmanager
    def _told(self) -> Iterator[None]:
        """A full disk or a lost one becomes one line that names the ledger."""
        try:
            yield
        except sqlite3.Error as error:
            raise OutputRefused(
                self._name, f"cannot be written ({error}): what was kept before is whole, run again"
            ) from error

    def outcomes(self, run: int) -> Iterator[Outcome]:
        """Every file that a run met, once, by path."""
        yield from self._read("WHERE run = ? ORDER BY path", (run,))

    def worst(self, run: int, count: int) -> tuple[Outcome, ...]:
        """The worst files of a run, worst first."""
        order = "WHERE run = ? ORDER BY severity DESC, visibility DESC, path LIMIT ?"
        return tuple(self._read(order, (run, count)))

    def with_banding(self) -> Iterator[tuple[Outcome, float]]:
        """Every outcome with banding in the whole ledger and its file's time, in days since 1970."""
        rows = self._db.execute(
            f"SELECT path, outcome, modified_ns FROM {_JOINED} WHERE banding "
            "GROUP BY files.content ORDER BY modified_ns"
        )
        for path, outcome, modified_ns in rows:
            yield _outcome(path, outcome), modified_ns / 86_400e9

    def tally(self, run: int) -> dict[tuple[str, Verdict], int]:
        """Number of files of a run for each (material, verdict)."""
        rows = self._db.execute(
            "SELECT json_extract(terms.terms, '$.material'), verdict, count(*) "
            f"FROM {_JOINED} JOIN terms ON terms.key = files.terms WHERE run = ? GROUP BY 1, 2",
            (run,),
        )
        return {(material, verdict): count for material, verdict, count in rows}

    def failures(self, run: int) -> Iterator[tuple[str, str]]:
        """Path and reason of each file of a run that could not be examined, by path."""
        query = f"SELECT path, error FROM {_JOINED} WHERE run = ? AND error <> '' ORDER BY path"
        yield from self._db.execute(query, (run,))

    def _read(self, where: str, values: tuple[int, ...]) -> Iterator[Outcome]:
        for path, outcome in self._db.execute(f"SELECT path, outcome FROM {_JOINED} {where}", values):
            yield _outcome(path, outcome)


def _migrate(db: sqlite3.Connection, name: str) -> None:
    (version,) = db.execute("PRAGMA user_version").fetchone()
    if version > len(MIGRATIONS):
        known = f"this moire knows {len(MIGRATIONS)}"
        raise OutputRefused(name, f"is a ledger of version {version}, {known}: update moire")
    if version == 0 and db.execute("SELECT count(*) FROM sqlite_master").fetchone()[0]:
        raise OutputRefused(name, "is a database of something else: give another name to --ledger")
    for number, script in enumerate(MIGRATIONS[version:], version + 1):
        # One transaction for each step, so that a kill leaves a whole version.
        db.executescript(f"BEGIN IMMEDIATE; {script}; PRAGMA user_version = {number}; COMMIT;")


def terms_key(terms: Terms) -> str:
    """Short digest of terms, the same for the same values."""
    return hashlib.sha256(_text(terms).encode()).hexdigest()[:16]


def _text(terms: Terms) -> str:
    return msgspec.json.encode(terms).decode()


def _outcome(path: str, text: bytes) -> Outcome:
    found = msgspec.json.decode(text, type=Outcome)
    # One content may lie at several places.
    return found if found.path == path else replace(found, path=path, file=path.rsplit(os.sep, 1)[-1])


def _locked(name: str) -> int | None:
    """Hold a ledger for this process alone; the system lets go of it however the process ends.

    Two runs at once would each take files out of the other's table.
    """
    try:
        import fcntl
    except ImportError:  # not on this system: its users keep to one run at a time
        return None
    try:
        # Beside the ledger: closing a second handle on the ledger itself would drop SQLite's own locks.
        handle = os.open(f"{name}-lock", os.O_CREAT | os.O_RDWR, 0o666)
    except OSError as error:
        raise OutputRefused(name, f"cannot be used as a ledger ({error.strerror})") from error
    try:
        fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError as error:
        os.close(handle)
        raise OutputRefused(name, "is in use by another run: wait for it, or keep another ledger") from error
    return handle


def _is_database(name: str) -> bool:
    try:
        with open(name, "rb") as file:
            head = file.read(16)
    except OSError as error:
        raise OutputRefused(name, f"cannot be opened ({error.strerror}): check its permissions") from error
    return head in (b"", b"SQLite format 3\0")
