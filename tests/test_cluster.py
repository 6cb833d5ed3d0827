"""The same batch on an existing engine: a real scheduler, two workers, one of them killed."""

import json
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
from leaves import kept, tiny_folder

from moire.cli.main import main

pytest.importorskip("distributed", reason="the cluster extra is not installed")


@pytest.fixture
def engine(tmp_path: Path) -> Iterator[tuple[str, list[subprocess.Popen[bytes]]]]:
    """Address of a scheduler of its own and its two workers, as processes."""
    about = tmp_path / "scheduler.json"

    def start(*arguments: str) -> subprocess.Popen[bytes]:
        with (tmp_path / "engine.log").open("ab") as log:
            return subprocess.Popen(
                [sys.executable, "-m", "distributed.cli." + arguments[0], *arguments[1:], "--no-dashboard"],
                stdout=log, stderr=log, cwd=tmp_path,
            )  # fmt: skip

    common = ("--scheduler-file", str(about))
    processes = [start("dask_scheduler", "--host", "127.0.0.1", "--port", "0", *common)]
    wait_for(about)
    processes += [
        start("dask_worker", *common, "--no-nanny", "--nthreads", "1", "--host", "127.0.0.1")
        for _ in range(2)
    ]
    try:
        yield json.loads(about.read_text())["address"], processes[1:]
    finally:
        for process in reversed(processes):
            process.kill()
            process.wait()


def wait_for(path: Path) -> None:
    end = time.monotonic() + 30
    while not path.exists() or not path.read_text().strip():
        assert time.monotonic() < end
        time.sleep(0.05)


def test_a_killed_worker_costs_no_file(
    tmp_path: Path, engine: tuple[str, list[subprocess.Popen[bytes]]], capsys: pytest.CaptureFixture[str]
) -> None:
    from distributed import Client

    address, workers = engine
    with Client(address, set_as_default=False) as client:
        client.wait_for_workers(2, timeout=30)
    paths = tiny_folder(tmp_path / "scans", 400, broken_every=100)
    log = tmp_path / "t.jsonl"
    command = [sys.executable, "-m", "moire", "intake", str(tmp_path / "scans"), "--cluster", address,
               "--ledger", str(tmp_path / "l.sqlite"), "--jsonl", str(log), "--json"]  # fmt: skip
    batch = subprocess.Popen(command, stdout=subprocess.PIPE)
    while kept(tmp_path / "l.sqlite") < 40:
        assert batch.poll() is None
        time.sleep(0.02)
    workers[0].kill()
    during = kept(tmp_path / "l.sqlite")
    out, _ = batch.communicate(timeout=60)
    assert during < 400
    assert batch.returncode == 5
    found = [json.loads(line) for line in log.read_text().splitlines()]
    assert [d["path"] for d in found] == sorted(map(str, paths))
    assert sum(bool(d["error"]) for d in found) == 4
    assert all("ends early" in d["error"] for d in found if d["error"])
    assert json.loads(out)["verdicts"]["unreadable"] == 4


def test_an_engine_that_does_not_answer_is_told_of(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    import moire.cluster

    monkeypatch.setattr(moire.cluster.engine.__wrapped__, "__kwdefaults__", {"wait_s": 0.5})  # type: ignore[attr-defined]
    with pytest.raises(SystemExit) as stop:
        main(
            [
                "intake",
                str(tmp_path),
                "--ledger",
                str(tmp_path / "l.sqlite"),
                "--cluster",
                "tcp://127.0.0.1:9",
            ]
        )
    assert stop.value.code == 2
    assert "no engine answers at tcp://127.0.0.1:9" in capsys.readouterr().err
