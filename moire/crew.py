"""Many files through any executor: what is lost of a crash or a hang is that one file."""

from __future__ import annotations

import multiprocessing
import os
import time
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import (
    FIRST_COMPLETED,
    BrokenExecutor,
    CancelledError,
    Executor,
    Future,
    ProcessPoolExecutor,
    wait,
)

from moire.errors import EngineLost
from moire.outcome import Outcome, Terms, failed, path_text
from moire.station import INNER_THREADS, Job, examine_file, prepare

LIMIT_S = 600.0
# A station ends a file at its limit; past this many limits nobody will answer for it any more.
_PATIENCE = 3.0
_TICK_S = 0.5


def examine_many(
    paths: Iterable[str | os.PathLike[str]],
    *,
    executor: Executor | Callable[[], Executor],
    terms: Terms | Callable[[str], Terms] | None = None,
    ahead: int = 0,
    limit_s: float = LIMIT_S,
    sheet: str = "",
) -> Iterator[Outcome]:
    """Examine many files, each in its own task, and yield what became of each as it is done.

    Parameters
    ----------
    paths : iterable of paths
        Taken as they are needed, never all at once.
    executor : Executor, or callable that makes one
        Any `concurrent.futures.Executor`. Give a callable to have a broken pool of processes
        replaced; one that is made here is also shut down here.
    terms : Terms, or callable from a path to Terms, or None
        What each file is examined under.
    ahead : int
        Files handed out at a time; 0 for two for each processor of this machine.
    limit_s : float
        Seconds for one file. Held where the executor runs processes.
    sheet : str
        Folder of a contact sheet that keeps pictures of each file, or ''.

    Yields
    ------
    Outcome
        One for each path, in the order in which they are done.

    Raises
    ------
    EngineLost
        If the executor gives up and cannot be replaced.
    """
    crew = _Crew(executor)
    fresh = _jobs(iter(paths), terms, limit_s, sheet)
    in_line: deque[Job] = deque()
    suspects: deque[Job] = deque()
    seen_broken: set[Job] = set()
    waiting: dict[Future[Outcome], tuple[Job, float]] = {}
    room = ahead or 2 * (os.cpu_count() or 1)
    done_all = False
    # After a crash each file that was under way is tried alone, to tell which one it was.
    alone: Job | None = None
    try:
        while True:
            while alone is None and len(waiting) < room and not (suspects and waiting):
                job = suspects.popleft() if suspects else in_line.popleft() if in_line else next(fresh, None)
                if job is None:
                    break
                was_suspect = job in seen_broken
                future = crew.submit(job)
                if future is None:
                    (suspects if was_suspect else in_line).appendleft(job)
                    crew.replace()
                    break
                waiting[future] = (job, time.monotonic())
                alone = job if was_suspect else None
            if not waiting:
                if in_line or suspects:
                    continue
                break
            wait(waiting, timeout=_TICK_S, return_when=FIRST_COMPLETED)
            lost: list[Job] = []
            for future in [f for f in waiting if f.done()]:
                job, began = waiting.pop(future)
                outcome = _answer(future, job)
                if outcome is None and job is alone:
                    outcome = _lost(job, _why_lost(time.monotonic() - began, limit_s))
                    crew.replace()
                if outcome is None:
                    lost.append(job)
                    continue
                alone = None if job is alone else alone
                seen_broken.discard(job)
                yield outcome
            overdue = [
                f for f, (_, began) in waiting.items() if time.monotonic() - began > _PATIENCE * limit_s
            ]
            for future in overdue:
                job, _ = waiting.pop(future)
                alone = None if job is alone else alone
                yield _lost(job, f"gave no answer in {_PATIENCE * limit_s:g} s: look at it by itself")
            if overdue and crew.own:
                in_line.extend(job for job, _ in waiting.values())
            if lost:
                suspects.extend(lost)
                suspects.extend(job for job, _ in waiting.values())
                seen_broken.update(suspects)
            if lost or (overdue and crew.own):
                waiting.clear()
                crew.replace()
        done_all = True
    finally:
        crew.close(whole=done_all)


def processes(jobs: int) -> ProcessPoolExecutor:
    """A pool of processes on this machine, each with one thread inside."""
    for name in INNER_THREADS:
        os.environ.setdefault(name, "1")
    methods = multiprocessing.get_all_start_methods()
    context = multiprocessing.get_context("forkserver" if "forkserver" in methods else "spawn")
    if "forkserver" in methods:
        # Imported once there, a replaced worker starts at once.
        context.set_forkserver_preload(["moire.examine", "moire.station"])
    return ProcessPoolExecutor(jobs, mp_context=context, initializer=prepare)


class _Crew:
    """An executor and, where it was made here, the means to replace it."""

    def __init__(self, executor: Executor | Callable[[], Executor]) -> None:
        self.make = None if isinstance(executor, Executor) else executor
        self.executor: Executor = executor if isinstance(executor, Executor) else executor()

    @property
    def own(self) -> bool:
        return self.make is not None

    def submit(self, job: Job) -> Future[Outcome] | None:
        """A future, or None if the executor broke before it took the job."""
        try:
            return self.executor.submit(examine_file, job)
        except BrokenExecutor:
            return None

    def replace(self) -> None:
        if self.make is None:
            raise EngineLost("the executor broke and cannot be replaced: run again to go on")
        self.close(whole=False)
        self.executor = self.make()

    def close(self, *, whole: bool) -> None:
        if self.make is None:
            return
        # A pool waits for its processes: those that hang must be ended first, and only it knows them.
        for process in () if whole else list((getattr(self.executor, "_processes", None) or {}).values()):
            process.kill()
        self.executor.shutdown(wait=whole, cancel_futures=True)


def _jobs(
    paths: Iterator[str | os.PathLike[str]],
    terms: Terms | Callable[[str], Terms] | None,
    limit_s: float,
    sheet: str,
) -> Iterator[Job]:
    for path in paths:
        name = os.fspath(path)
        under = terms(name) if callable(terms) else terms or Terms()
        yield Job(path=name, terms=under, limit_s=limit_s, sheet=sheet)


def _answer(future: Future[Outcome], job: Job) -> Outcome | None:
    """The outcome, a failure's outcome, or None if the executor broke under it."""
    try:
        return future.result()
    except BrokenExecutor:
        return None
    except CancelledError as error:
        raise EngineLost("the executor dropped its work: run again to go on") from error
    except Exception as error:
        first = (str(error).splitlines() or [""])[0]
        return _lost(job, f"ended what examined it ({type(error).__name__}: {first}): look at it by itself")


def _why_lost(took_s: float, limit_s: float) -> str:
    if took_s >= limit_s:
        return f"took longer than {limit_s:g} s: look at it by itself"
    return "ended the process that examined it: damaged, or too large for the memory"


def _lost(job: Job, reason: str) -> Outcome:
    from moire.scanfile import digest

    try:
        content = digest(job.path)
    except OSError:
        content = ""
    return failed(path_text(job.path), reason, job.terms, sha256=content)
