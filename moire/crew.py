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
from dataclasses import dataclass, field

from moire.errors import EngineLost
from moire.outcome import Outcome, Terms, failed, path_text
from moire.station import INNER_THREADS, Job, examine_file, prepare

LIMIT_S = 600.0
# A station ends a file at its limit; past this many limits nobody will answer for it any more.
_PATIENCE = 3.0
_TICK_S = 0.5
_START_S = 120.0


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
    desk = _Desk(
        crew=_Crew(executor),
        fresh=_jobs(iter(paths), terms, limit_s, sheet),
        room=ahead or 2 * (os.cpu_count() or 1),
        limit_s=limit_s,
    )
    whole = False
    try:
        while desk.hand_out():
            yield from desk.collect()
        whole = True
    finally:
        desk.crew.close(whole=whole)


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


@dataclass(slots=True, kw_only=True)
class _Desk:
    """Jobs on their way: who has which, and which must be tried alone.

    When a pool breaks, every job under way comes back without an answer. Each of them is then
    tried alone, and the one that breaks the pool again is the one to blame.
    """

    crew: _Crew
    fresh: Iterator[Job]
    room: int
    limit_s: float
    again: deque[Job] = field(default_factory=deque)
    suspects: deque[Job] = field(default_factory=deque)
    waiting: dict[Future[Outcome], tuple[Job, float]] = field(default_factory=dict)
    alone: Job | None = None

    def hand_out(self) -> bool:
        """Give out as many jobs as there is room for; False when all is done."""
        while self.alone is None and len(self.waiting) < self.room and not (self.suspects and self.waiting):
            suspect = bool(self.suspects)
            line = self.suspects if suspect else self.again
            job = line.popleft() if line else next(self.fresh, None)
            if job is None:
                break
            future = self.crew.submit(job)
            if future is None:
                line.appendleft(job)
                self.crew.replace()
                continue
            self.waiting[future] = (job, time.monotonic())
            self.alone = job if suspect else None
        return bool(self.waiting)

    def collect(self) -> Iterator[Outcome]:
        """Outcomes of what is done by now; waits a moment for the first."""
        wait(self.waiting, timeout=_TICK_S, return_when=FIRST_COMPLETED)
        lost: list[Job] = []
        for future in [f for f in self.waiting if f.done()]:
            job, began = self.waiting.pop(future)
            outcome = _answer(future, job)
            if outcome is not None:
                yield self._done(job, outcome)
            elif job is self.alone:
                self.crew.replace()
                yield self._done(job, _lost(job, _why_lost(time.monotonic() - began, self.limit_s)))
            else:
                lost.append(job)
        if lost:
            self.suspects.extend(lost)
            self._start_afresh(self.suspects)
        patience = _PATIENCE * self.limit_s
        overdue = [f for f, (_, began) in self.waiting.items() if time.monotonic() - began > patience]
        for future in overdue:
            job, _ = self.waiting.pop(future)
            yield self._done(job, _lost(job, f"gave no answer in {patience:g} s: look at it by itself"))
        if overdue and self.crew.own:
            self._start_afresh(self.again)

    def _done(self, job: Job, outcome: Outcome) -> Outcome:
        self.alone = None if job is self.alone else self.alone
        return outcome

    def _start_afresh(self, line: deque[Job]) -> None:
        """A new executor; what the old one still had goes back into a line."""
        line.extend(job for job, _ in self.waiting.values())
        self.waiting.clear()
        self.crew.replace()


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
        try:
            # Where not even nothing can be done, the files are not to blame.
            self.executor.submit(os.getpid).result(_START_S)
        except (BrokenExecutor, TimeoutError) as error:
            raise EngineLost(f"what examines the files cannot be started ({error})") from error

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
