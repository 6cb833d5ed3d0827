"""A watched file is taken once it is whole, and a verdict can call a program."""

import json
import os
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

from leaves import tiny_folder

from moire.callout import call_out
from moire.intake import find_scans
from moire.outcome import Terms, failed
from moire.watch import settled

DEMOS = Path(__file__).resolve().parents[1] / "demo_images"


class Clock:
    """Time that passes only while something sleeps."""

    def __init__(self) -> None:
        self.now = 0.0

    def __call__(self) -> float:
        return self.now

    def sleep(self, seconds: float) -> None:
        self.now += seconds


def looks(folder: Path) -> Iterator[list[str]]:
    clock = Clock()
    for ready in settled(lambda: find_scans(folder), still_s=3, look_s=1, clock=clock, sleep=clock.sleep):
        yield [Path(p).name for p in ready]


def test_a_file_is_taken_once_it_has_stayed_the_same(tmp_path: Path) -> None:
    watch = looks(tmp_path)
    path = tmp_path / "a.png"
    assert next(watch) == []
    for size in (10, 20, 30, 40, 50):
        path.write_bytes(b"x" * size)
        assert next(watch) == []
    assert [next(watch) for _ in range(5)] == [[], [], ["a.png"], [], []]


def test_a_change_of_time_alone_starts_the_wait_again(tmp_path: Path) -> None:
    watch = looks(tmp_path)
    path = tmp_path / "a.png"
    path.write_bytes(b"x" * 10)
    for moment in range(6):
        os.utime(path, (moment, moment))
        assert next(watch) == []
    assert [next(watch) for _ in range(4)] == [[], [], ["a.png"], []]


def test_a_file_written_again_is_taken_again(tmp_path: Path) -> None:
    watch = looks(tmp_path)
    path = tmp_path / "a.png"
    path.write_bytes(b"x")
    assert [next(watch) for _ in range(4)][-1] == ["a.png"]
    path.write_bytes(b"xy")
    assert [next(watch) for _ in range(4)][-1] == ["a.png"]


def test_files_that_come_go_or_stay_empty(tmp_path: Path) -> None:
    watch = looks(tmp_path)
    (tmp_path / "gone.png").write_bytes(b"x")
    (tmp_path / "empty.png").touch()
    assert [next(watch) for _ in range(2)] == [[], []]
    (tmp_path / "gone.png").unlink()
    assert [next(watch) for _ in range(27)] == [[]] * 27
    assert [name for _ in range(3) for name in next(watch)] == ["empty.png"]


def test_a_program_is_called_with_its_arguments_as_they_are(tmp_path: Path) -> None:
    told = tmp_path / "told.json"
    name = "a b; rm -rf $(x) {verdict}.png"
    script = "import json, sys; json.dump(sys.argv[1:], open(sys.argv[1], 'w'))"
    arguments = [
        sys.executable,
        "-c",
        script,
        str(told),
        "{path}",
        "{file}:{verdict}",
        "{visibility}",
        "{other}",
    ]
    assert call_out(arguments, failed(f"/s/{name}", "is empty", Terms())) == ""
    assert json.loads(told.read_text()) == [str(told), f"/s/{name}", f"{name}:unreadable", "0", "{other}"]


def test_a_program_that_fails_is_told_of() -> None:
    outcome = failed("/s/a.png", "is empty", Terms())
    said = call_out([sys.executable, "-c", "import sys; sys.exit('no lamp')"], outcome)
    assert said.endswith("ended with 1: no lamp")
    assert "cannot be called: No such file" in call_out(["no-such-program-here"], outcome)


def test_watching_takes_what_arrives_until_a_verdict_stops_the_line(tmp_path: Path) -> None:
    scans, log, told = tmp_path / "scans", tmp_path / "t.jsonl", tmp_path / "told"
    tiny_folder(scans, 2)
    program = ["/bin/sh", "-c", 'echo "$1" >> "$0"', str(told), "{file}"]
    (tmp_path / "p.toml").write_text(
        f'fail_on = ["rescan"]\n[on]\nrescan = {json.dumps(program)}\nsound = {json.dumps(program)}\n'
    )
    process = subprocess.Popen(
        [sys.executable, "-m", "moire", "intake", str(scans), "--watch", "--jobs", "1", "--quiet",
         "--ledger", str(tmp_path / "l.sqlite"), "--jsonl", str(log), "--profile", str(tmp_path / "p.toml")]
    )  # fmt: skip
    wait_for_lines(log, 2)
    with (DEMOS / "market-flyer.png").open("rb") as source, (scans / "slow.png").open("wb") as target:
        for _ in range(5):
            target.write(source.read(40_000))
            target.flush()
            time.sleep(0.3)
        shutil.copyfileobj(source, target)
    assert process.wait(20) == 10
    assert wait_for_lines(log, 3)["slow.png"] == "rescan"
    assert told.read_text().split() == ["slow.png"]


def test_ctrl_c_ends_watching_with_all_outputs_written(tmp_path: Path) -> None:
    scans, log = tmp_path / "scans", tmp_path / "t.jsonl"
    tiny_folder(scans, 2)
    process = subprocess.Popen(
        [sys.executable, "-m", "moire", "intake", str(scans), "--watch", "--jobs", "1",
         "--ledger", str(tmp_path / "l.sqlite"), "--jsonl", str(log)],
        stdout=subprocess.PIPE, text=True, preexec_fn=heed_interrupts,
    )  # fmt: skip
    wait_for_lines(log, 2)
    process.send_signal(signal.SIGINT)
    out, _ = process.communicate(timeout=20)
    assert process.returncode == 0
    assert "2 files" in out


def heed_interrupts() -> None:
    """A shell that runs tests in the background makes their children deaf to Ctrl-C."""
    signal.signal(signal.SIGINT, signal.SIG_DFL)


def wait_for_lines(log: Path, count: int) -> dict[str, str]:
    end = time.monotonic() + 20
    while True:
        found = [json.loads(line) for line in log.read_text().splitlines()] if log.exists() else []
        if len(found) >= count:
            return {d["file"]: d["verdict"] for d in found}
        assert time.monotonic() < end
        time.sleep(0.1)
