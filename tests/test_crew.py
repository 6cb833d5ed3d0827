"""Many files through any executor: whatever one file does, the others come through."""

import os
from collections import Counter
from concurrent.futures import BrokenExecutor, Executor, Future, ThreadPoolExecutor
from functools import partial
from pathlib import Path
from typing import Any

import cv2
import msgspec
import numpy as np
import pytest
import tifffile
from leaves import sabotaged, tiny_folder

import moire
from moire.crew import processes
from moire.errors import EngineLost
from moire.outcome import Terms

DEMOS = Path(__file__).resolve().parents[1] / "demo_images"


def test_any_executor_gives_the_same_outcomes(tmp_path: Path) -> None:
    paths = tiny_folder(tmp_path, 12, broken_every=5)

    def found(outcomes: Any) -> list[Any]:
        documents = [msgspec.to_builtins(o) | {"seconds": 0, "examined_at": ""} for o in outcomes]
        return sorted(documents, key=lambda d: str(d["path"]))

    with ThreadPoolExecutor(2) as threads:
        by_threads = found(moire.examine_many(paths, executor=threads))
    by_processes = found(moire.examine_many(paths, executor=partial(processes, 2)))
    assert by_threads == by_processes
    assert [d["path"] for d in by_threads] == [str(p) for p in paths]
    assert Counter(d["verdict"] for d in by_threads)["unreadable"] == 3


def test_an_outcome_has_the_keys_of_an_examination(tmp_path: Path) -> None:
    (path,) = tiny_folder(tmp_path, 1)
    with ThreadPoolExecutor(1) as threads:
        (outcome,) = moire.examine_many([path], executor=threads)
    examination = msgspec.to_builtins(moire.examine(moire.read(path)))
    document = msgspec.to_builtins(outcome)
    assert {k: document[k] for k in examination if k != "format"} == {
        k: v for k, v in examination.items() if k != "format"
    }
    assert outcome.examined_at
    assert outcome.seconds > 0


def test_a_crash_a_hang_and_a_fault_cost_one_file_each(tmp_path: Path) -> None:
    paths = tiny_folder(tmp_path, 20)
    for i, name in ((3, "crash-1.png"), (4, "hang-1.png"), (9, "crash-2.png"), (15, "bug-1.png")):
        paths[i] = paths[i].rename(paths[i].with_name(name))
    outcomes = list(moire.examine_many(paths, executor=sabotaged, limit_s=2.0, ahead=4))
    assert sorted(o.path for o in outcomes) == sorted(str(p) for p in paths)
    errors = {o.file: o.error for o in outcomes if o.error}
    assert set(errors) == {"crash-1.png", "hang-1.png", "crash-2.png", "bug-1.png"}
    assert "took longer than 2 s" in errors["hang-1.png"]
    assert "ended the process" in errors["crash-1.png"]
    assert "ended the process" in errors["crash-2.png"]
    assert "ZeroDivisionError: a fault of ours" in errors["bug-1.png"]
    assert all(o.sha256 for o in outcomes)


def test_a_process_that_cannot_end_itself_is_given_up(tmp_path: Path) -> None:
    """As one that waits for a network disk that is gone."""
    paths = tiny_folder(tmp_path, 8)
    paths[2] = paths[2].rename(paths[2].with_name("stop-1.png"))
    outcomes = list(moire.examine_many(paths, executor=sabotaged, limit_s=0.8, ahead=4))
    assert sorted(o.path for o in outcomes) == sorted(str(p) for p in paths)
    assert {o.file: o.error for o in outcomes if o.error} == {
        "stop-1.png": "gave no answer in 2.4 s: look at it by itself"
    }


def test_paths_are_taken_as_they_are_needed(tmp_path: Path) -> None:
    paths = tiny_folder(tmp_path, 30)
    taken = []

    def walk() -> Any:
        for path in paths:
            taken.append(path)
            yield path

    with ThreadPoolExecutor(1) as threads:
        outcomes = moire.examine_many(walk(), executor=threads, ahead=3)
        next(outcomes)
        assert len(taken) <= 6
        outcomes.close()


class _Broken(Executor):
    def submit(self, *_: Any, **__: Any) -> Future[Any]:  # type: ignore[override]
        raise BrokenExecutor("gone")


def test_an_executor_that_cannot_be_replaced_is_told_of(tmp_path: Path) -> None:
    with pytest.raises(EngineLost, match="run again"):
        list(moire.examine_many(tiny_folder(tmp_path, 2), executor=_Broken()))


def _unable() -> None:
    raise RuntimeError("no licence for this processor")


def test_where_nothing_can_start_no_file_is_blamed(tmp_path: Path) -> None:
    outcomes = moire.examine_many(
        tiny_folder(tmp_path, 3), executor=lambda: ThreadPoolExecutor(1, initializer=_unable)
    )
    with pytest.raises(EngineLost, match="cannot be started"):
        list(outcomes)


def test_a_process_has_one_thread_inside() -> None:
    with processes(1) as pool:
        assert pool.submit(cv2.getNumThreads).result() == 1
        assert pool.submit(os.getenv, "OMP_NUM_THREADS").result() == "1"


def test_the_worst_page_of_a_file_is_told(tmp_path: Path) -> None:
    plain, screened = (moire.read(DEMOS / f"courier-leaf{part}.png") for part in (".unscreened", ""))
    path = tmp_path / "volume.tif"
    tifffile.imwrite(path, np.stack([plain.pixels, screened.pixels, plain.pixels]), resolution=(300, 300),
                     resolutionunit=2, photometric="rgb")  # fmt: skip
    with ThreadPoolExecutor(1) as threads:
        (outcome,) = moire.examine_many([path], executor=threads, sheet=str(tmp_path / "sheet"))
    assert (outcome.page, outcome.pages, outcome.verdict) == (2, 3, "mendable")
    thumb = cv2.imread(str(next((tmp_path / "sheet").rglob("*.png"))))
    # The piece is of that page: its screen is in it, as it is not in the others.
    assert np.asarray(thumb).std() > 30


def test_terms_are_asked_for_each_file(tmp_path: Path) -> None:
    paths = tiny_folder(tmp_path, 4)
    with ThreadPoolExecutor(1) as threads:
        outcomes = moire.examine_many(
            paths, executor=threads, terms=lambda path: Terms(ppi=(300.0, 300.0), material=Path(path).stem)
        )
        assert [(o.material, o.ppi) for o in outcomes] == [(p.stem, (300.0, 300.0)) for p in paths]
