"""Files that are fully written, from a folder that others write into.

Looking again and again works on every file system, the network's too, where the kernel tells
of nothing; a file is taken when its size and time of change have stayed for a while.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterable, Iterator

from moire.ledger import Stamp

LOOK_S = 2.0


def settled(
    find: Callable[[], Iterable[str]],
    *,
    still_s: float = 2 * LOOK_S,
    look_s: float = LOOK_S,
    clock: Callable[[], float] = time.monotonic,
    sleep: Callable[[float], None] = time.sleep,
) -> Iterator[list[str]]:
    """Batches of files that have just settled, one after each look, for ever; often empty.

    Parameters
    ----------
    find : callable
        Lists the folder's files.
    still_s : float
        Seconds for which a file's size and time of change must stay.
    look_s : float
        Seconds between two looks.
    clock, sleep : callable
        Of the machine; a test gives its own.

    Notes
    -----
    A file that is written again is yielded again once it has settled. An empty file may be
    about to be written: it counts as settled after ten times as long.
    """
    met: dict[str, tuple[Stamp, float]] = {}
    given: dict[str, Stamp] = {}
    while True:
        now = clock()
        ready: list[str] = []
        here = set()
        for path in find():
            try:
                stamp = Stamp.of(path)
            except OSError:
                continue  # gone again, or not yet to be seen: the next look tells
            here.add(path)
            if given.get(path) == stamp:
                continue
            if path not in met or met[path][0] != stamp:
                met[path] = (stamp, now)
            elif now - met[path][1] >= still_s * (1 if stamp.size else 10):
                given[path] = stamp
                del met[path]
                ready.append(path)
        for book in (met, given):
            for path in [p for p in book if p not in here]:
                del book[path]
        yield ready
        sleep(look_s)
