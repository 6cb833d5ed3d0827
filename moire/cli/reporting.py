"""Reports as files, stamped with the time at which they were made."""

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
        made_at=datetime.datetime.now().astimezone().isoformat(timespec="seconds"),
    )
    write_report(html, path, force=force)
