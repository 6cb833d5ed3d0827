"""A batch from a folder into a ledger: only what is new or changed is examined."""

from __future__ import annotations

import csv
import io
import os
import secrets
from collections.abc import Callable, Collection, Iterable, Iterator
from concurrent.futures import Executor
from pathlib import Path

import msgspec

from moire.crew import LIMIT_S, examine_many
from moire.errors import OutputRefused
from moire.ledger import Known, Ledger, Stamp
from moire.outcome import Outcome, Terms, failed, path_text
from moire.scanfile import digest

SUFFIXES = frozenset({".tif", ".tiff", ".png", ".jpg", ".jpeg", ".jp2", ".j2k", ".webp", ".bmp"})
COLUMNS = (
    "path", "verdict", "visibility", "kinds", "ruling_lpi", "ruling_lpcm", "angle_deg", "ink", "ppi_x",
    "ppi_y", "width_px", "height_px", "page", "pages", "material", "advice", "error", "seconds",
    "examined_at", "sha256", "software",
)  # fmt: skip


def find_scans(folder: str | os.PathLike[str], *, leave: Collection[str] = ()) -> Iterator[str]:
    """Every file below a folder that is named like a scan, folder by folder, by name.

    Parameters
    ----------
    folder : path
    leave : collection of str
        Folders not entered, such as one that holds our own pictures.

    Notes
    -----
    Hidden files and folders are passed over, links to folders not followed. A folder that
    cannot be listed is yielded itself, so that it is not lost in silence.
    """
    left = {os.path.abspath(name) for name in leave}
    try:
        with os.scandir(folder) as entries:
            found = sorted((e for e in entries if not e.name.startswith(".")), key=lambda e: e.name)
    except OSError:
        yield os.fspath(folder)
        return
    for entry in found:
        if entry.is_dir(follow_symlinks=False):
            if os.path.abspath(entry.path) not in left:
                yield from find_scans(entry.path, leave=leave)
        elif os.path.splitext(entry.name)[1].lower() in SUFFIXES:
            yield entry.path


def take_in(
    paths: Iterable[str],
    *,
    ledger: Ledger,
    run: int,
    executor: Executor | Callable[[], Executor],
    terms: Callable[[str], Terms],
    on_known: Callable[[Known], None] = lambda _: None,
    retry: bool = False,
    wanted: Callable[[Known], bool] = lambda _: False,
    ahead: int = 0,
    limit_s: float = LIMIT_S,
    sheet: str = "",
) -> Iterator[Outcome]:
    """Examine what the ledger does not know yet, keep it there, and yield it.

    Parameters
    ----------
    paths : iterable of str
    ledger : Ledger
    run : int
        Number that the ledger gave this run.
    executor, ahead, limit_s, sheet
        As for `moire.crew.examine_many`.
    terms : callable
        From a path to what it is examined under.
    on_known : callable
        Told of each file that need not be examined again.
    retry : bool
        Examine files again that failed before.
    wanted : callable
        Whether a known file must be examined again all the same.

    Yields
    ------
    Outcome
        Of each file that was examined now, already kept.
    """
    pending: dict[str, tuple[Stamp, Terms]] = {}
    unread: list[Outcome] = []

    def unknown() -> Iterator[str]:
        for path in paths:
            name, under = path_text(path), terms(path)
            try:
                stamp, reason = Stamp.of(path), ""
                if os.path.isdir(path):
                    reason = "is a folder that cannot be listed: check its permissions"
            except OSError as error:
                stamp = Stamp(size=-1, modified_ns=0)
                reason = f"cannot be opened ({error.strerror}): check its permissions"
            if reason:
                unread.append(failed(name, reason, under))
                pending[name] = (stamp, under)
                continue
            known = _known(ledger, path, name, stamp, under)
            if known is None or (retry and known.error) or wanted(known):
                pending[name] = (stamp, under)
                yield path
            else:
                ledger.see(run, name, stamp, known.content, under)
                on_known(known)

    def kept(outcome: Outcome) -> Outcome:
        stamp, under = pending.pop(outcome.path)
        ledger.record(run, outcome, stamp, under)
        return outcome

    done = examine_many(
        unknown(), executor=executor, terms=terms, ahead=ahead, limit_s=limit_s, sheet=sheet
    )  # fmt: skip
    for outcome in done:
        yield kept(outcome)
        while unread:
            yield kept(unread.pop())
    while unread:
        yield kept(unread.pop())


def _known(ledger: Ledger, path: str, name: str, stamp: Stamp, terms: Terms) -> Known | None:
    known = ledger.recall(name, stamp, terms)
    if known is None and ledger.may_hold(stamp):
        try:
            known = ledger.recall_content(digest(path), terms)
        except OSError:
            return None
    return None if known is not None and known.content.startswith("unread:") else known


def write_jsonl(outcomes: Iterable[Outcome], path: str) -> None:
    """One JSON document a line, whole or not at all; an older file of that name is replaced."""
    _replace(path, (msgspec.json.encode(o) + b"\n" for o in outcomes))


def write_csv(outcomes: Iterable[Outcome], path: str) -> None:
    """A table of the batch, whole or not at all; an older file of that name is replaced."""
    _replace(path, _rows(outcomes))


def _rows(outcomes: Iterable[Outcome]) -> Iterator[bytes]:
    line = io.StringIO(newline="")
    writer = csv.writer(line)
    writer.writerow(COLUMNS)
    for o in outcomes:
        screen = next((f.screen for f in o.findings if f.screen is not None), None)
        writer.writerow(
            [
                o.path, o.verdict, f"{o.visibility:.3g}",
                " ".join(dict.fromkeys(f.kind for f in o.findings)),
                *(("", "", "", "") if screen is None else (
                    f"{screen.ruling_lpi:.4f}", f"{screen.ruling_lpcm:.4f}", f"{screen.angle_deg:.4f}",
                    screen.ink)),
                *(("", "") if o.ppi is None else (f"{o.ppi[0]:g}", f"{o.ppi[1]:g}")),
                o.width_px, o.height_px, o.page, o.pages, o.material, " ".join(o.advice), o.error,
                o.seconds, o.examined_at, o.sha256, o.software,
            ]
        )  # fmt: skip
        yield line.getvalue().encode()
        line.seek(0)
        line.truncate()


def _replace(path: str, parts: Iterable[bytes]) -> None:
    target = Path(path)
    part = target.with_name(f".{secrets.token_hex(8)}.part")
    try:
        with part.open("xb") as file:
            for piece in parts:
                file.write(piece)
            file.flush()
            os.fsync(file.fileno())
        os.replace(part, target)
    except OSError as error:
        raise OutputRefused(path, f"cannot be written ({error.strerror}): nothing was left there") from error
    finally:
        part.unlink(missing_ok=True)
