"""Reports and preservation records as files, stamped with the time at which they were made."""

from __future__ import annotations

import datetime
import os
from collections.abc import Sequence

from moire.errors import OutputRefused
from moire.model import Examination, Mending, Scan


def check_report_path(path: str, *, inputs: Sequence[str], force: bool) -> None:
    """Refuse a report that would overwrite something, before any work is done."""
    if os.path.exists(path):
        if any(os.path.exists(i) and os.path.samefile(i, path) for i in inputs):
            raise OutputRefused(path, "is the input: give the report another name")
        if not force:
            raise OutputRefused(path, "exists: give another name or --force")


def save_report(
    path: str,
    *,
    master: Scan,
    before: Examination,
    mending: Mending | None,
    inputs: Sequence[str],
    force: bool,
    derivative: tuple[str, str] = ("", ""),
) -> None:
    """Write the HTML report; `derivative` is its file name and digest."""
    from moire.report import render_report, write_report

    check_report_path(path, inputs=inputs, force=force)
    html = render_report(
        master=master,
        before=before,
        mending=mending,
        derivative_name=derivative[0],
        derivative_sha256=derivative[1],
        made_at=_now(),
    )
    write_report(html, path, force=force)


def save_premis(
    path: str, mending: Mending, *, master: str, derivative: str, inputs: Sequence[str], force: bool
) -> None:
    """Write the PREMIS record of a derivative that is on disk.

    Raises
    ------
    OutputRefused
        If it may not be written, or the master is no longer the file that was mended.
    """
    from moire.preservation import StoredFile, premis
    from moire.scanfile import digest, write_bytes

    stored = [
        StoredFile(name=os.path.basename(name), sha256=digest(name), size=os.path.getsize(name))
        for name in (master, derivative)
    ]
    if stored[0].sha256 != mending.before.sha256:
        raise OutputRefused(path, f"{master} changed while it was mended: mend it again")
    record = premis(mending, master=stored[0], derivative=stored[1], at=_now())
    write_bytes(record, path, force=force, inputs=[*inputs, derivative])


def _now() -> str:
    return datetime.datetime.now().astimezone().isoformat(timespec="seconds")
