"""What one process does with one file: read it, examine every page, keep its pictures.

A station never raises on a bad file and never outlives its parent. Where it runs in a
process of its own, a file that takes too long ends the process, and the file alone.
"""

from __future__ import annotations

import datetime
import faulthandler
import multiprocessing
import os
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from multiprocessing.connection import wait

from moire.errors import ScanUnreadable
from moire.model import Examination, Scan
from moire.outcome import Outcome, Terms, failed, path_text, succeeded, under_terms, worst

INNER_THREADS = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")


@dataclass(frozen=True, slots=True, kw_only=True)
class Job:
    """One file to examine.

    ``sheet`` is the folder of a contact sheet that wants this file's pictures, or ''.
    """

    path: str
    terms: Terms
    limit_s: float
    sheet: str = ""


def examine_file(job: Job) -> Outcome:
    """Examine one file; whatever is wrong with it is in the outcome."""
    began = time.perf_counter()
    with _time_limit(job.limit_s):
        outcome = _examine(job)
    now = datetime.datetime.now().astimezone().isoformat(timespec="seconds")
    return replace(outcome, seconds=round(time.perf_counter() - began, 4), examined_at=now)


def prepare() -> None:
    """Set up a worker process: one thread inside, deaf to Ctrl-C, gone when its parent is."""
    import signal

    import cv2

    import moire.examine  # noqa: F401  (paid once for each process, not by its first file)

    signal.signal(signal.SIGINT, signal.SIG_IGN)
    cv2.setNumThreads(1)
    parent = multiprocessing.parent_process()
    if parent is not None:
        threading.Thread(target=_leave_with, args=(parent.sentinel,), daemon=True).start()


def _leave_with(sentinel: int) -> None:
    wait([sentinel])
    os._exit(1)


@contextmanager
def _time_limit(limit_s: float) -> Iterator[None]:
    # Only a process of its own may be ended, and only from C: a hung decoder holds the interpreter.
    if multiprocessing.parent_process() is None:
        yield
        return
    with open(os.devnull, "w") as nowhere:
        faulthandler.dump_traceback_later(limit_s, exit=True, file=nowhere)
        try:
            yield
        finally:
            faulthandler.cancel_dump_traceback_later()


def _examine(job: Job) -> Outcome:
    from moire.scanfile import digest, pages

    path = path_text(job.path)
    try:
        count = pages(job.path)
        results = [_examine_page(job, page) for page in range(1, count + 1)]
        which = worst([found for _, found in results])
        found = results[which][1]
        if job.sheet:
            from moire.contact import keep_pictures

            scan = results[which][0] or _read(job, which + 1)
            keep_pictures(scan, found, job.sheet, terms=job.terms)
        clean = replace(found, file=path.rsplit(os.sep, 1)[-1])
        return succeeded(clean, path, page=which + 1, pages=count, material=job.terms.material)
    except ScanUnreadable as error:
        reason = error.reason
    except Exception as error:
        # A fault of ours is told like a fault of the file: it must not cost the other files.
        first = (str(error).splitlines() or [""])[0]
        reason = f"could not be examined ({type(error).__name__}: {first}): report this"
    try:
        content = digest(job.path)
    except OSError:
        content = ""
    return failed(path, reason, job.terms, sha256=content)


def _examine_page(job: Job, page: int) -> tuple[Scan | None, Examination]:
    """Examination of a page, and the scan itself where it is the first and pictures are wanted."""
    from moire.examine import examine

    scan = _read(job, page)
    found = under_terms(examine(scan, viewing=job.terms.viewing), job.terms)
    return (scan if job.sheet and page == 1 else None), found


def _read(job: Job, page: int) -> Scan:
    from moire.scanfile import read

    return read(job.path, ppi=job.terms.ppi, page=page)
