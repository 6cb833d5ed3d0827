"""A batch is examined once, whatever happens to it, and every file is told of once."""

import csv
import json
import os
import re
import shutil
import signal
import sqlite3
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import pytest
from leaves import kept, tiny_folder

from moire.cli.main import main
from moire.crew import processes
from moire.intake import find_scans, take_in
from moire.ledger import Ledger
from moire.outcome import Terms, under_terms

DEMOS = Path(__file__).resolve().parents[1] / "demo_images"


OUTPUTS = {"ledger": "l.sqlite", "csv": "t.csv", "jsonl": "t.jsonl"}


def run(*arguments: object) -> int:
    with pytest.raises(SystemExit) as stop:
        main(["intake", *map(str, arguments)])
    return int(stop.value.code or 0)


def table_of(path: Path) -> list[dict[str, str]]:
    with path.open(newline="") as file:
        return list(csv.DictReader(file))


def lines(path: Path) -> list[dict[str, Any]]:
    return [json.loads(line) for line in path.read_text().splitlines()]


def test_scans_are_found_by_folder_and_name(tmp_path: Path) -> None:
    for name in ("b.TIF", "a.png", "notes.txt", ".hidden.png", "v/2.jp2", "v/.trash/3.png", "sheet/t.jpg"):
        (tmp_path / name).parent.mkdir(parents=True, exist_ok=True)
        (tmp_path / name).touch()
    (tmp_path / "link").symlink_to(tmp_path / "v")
    found = [os.path.relpath(p, tmp_path) for p in find_scans(tmp_path, leave=[str(tmp_path / "sheet")])]
    assert found == ["a.png", "b.TIF", "v/2.jp2"]


def test_ledger_table_and_lines_name_every_file_once(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    scans = tmp_path / "scans"
    scans.mkdir()
    for name in ("courier-leaf.png", "market-flyer.png", "harbour-postcard.unscreened.png"):
        shutil.copy(DEMOS / name, scans)
    (scans / "torn.png").write_bytes((DEMOS / "market-flyer.png").read_bytes()[:5000])
    table, log = tmp_path / "t.csv", tmp_path / "t.jsonl"
    code = run(scans, "--ledger", tmp_path / "l.sqlite", "--csv", table, "--jsonl", log, "--jobs", 1)
    assert code == 5
    shown = capsys.readouterr().out
    assert "4 files: 1 unreadable, 1 rescan, 1 mendable, 1 sound." in " ".join(shown.split())
    assert shown.index("torn.png") < shown.index("market-flyer.png") < shown.index("courier-leaf.png")
    found = {d["file"]: d for d in lines(log)}
    assert {k: d["verdict"] for k, d in found.items()} == {
        "courier-leaf.png": "mendable",
        "harbour-postcard.unscreened.png": "sound",
        "market-flyer.png": "rescan",
        "torn.png": "unreadable",
    }
    assert "ends early" in found["torn.png"]["error"]
    rows = table_of(table)
    assert [r["path"] for r in rows] == sorted(str(p) for p in scans.iterdir())
    leaf = rows[0]
    assert float(leaf["ruling_lpi"]) == pytest.approx(85, rel=1e-3)
    assert (leaf["ppi_x"], leaf["ink"], leaf["kinds"]) == ("300", "black", "halftone")
    assert rows[3]["error"] == found["torn.png"]["error"]


def test_text_fits_80_columns(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("COLUMNS", "80")
    (tmp_path / ("very-long-name-" * 8 + ".png")).write_bytes(b"x")
    assert run(tmp_path, "--ledger", tmp_path / "l.sqlite", "--jobs", 1) == 5
    assert max(map(len, capsys.readouterr().out.splitlines())) <= 80


def test_a_second_run_examines_only_what_is_new_or_changed(tmp_path: Path) -> None:
    scans = tmp_path / "scans"
    paths = tiny_folder(scans, 10)
    where = {"terms": lambda _: Terms(), "executor": lambda: processes(1)}
    with Ledger(tmp_path / "l.sqlite") as ledger:

        def examined(**more: Any) -> set[str]:
            number = ledger.begin(str(scans), at="")
            done = take_in(find_scans(scans), ledger=ledger, run=number, **(where | more))
            names = {Path(o.path).name for o in done}
            assert len(list(ledger.outcomes(number))) == len(list(find_scans(scans)))
            return names

        assert len(examined()) == 10
        assert examined() == set()
        paths[0].write_bytes(paths[1].read_bytes() + b"more")
        shutil.copy(DEMOS / "courier-leaf.png", scans / "new.png")
        paths[2].rename(paths[2].with_name("moved.png"))
        paths[3].unlink()
        assert examined() == {paths[0].name, "new.png"}
        assert len(examined(terms=lambda _: Terms(viewing="print"))) == 10
        assert examined() == set()


def test_failed_files_are_tried_again_only_when_asked(tmp_path: Path) -> None:
    tiny_folder(tmp_path / "s", 4, broken_every=2)
    with Ledger(tmp_path / "l.sqlite") as ledger:

        def count(*, retry: bool) -> int:
            done = take_in(
                find_scans(tmp_path / "s"), ledger=ledger, run=ledger.begin("", at=""), retry=retry,
                executor=lambda: processes(1), terms=lambda _: Terms(),
            )  # fmt: skip
            return len(list(done))

        assert [count(retry=False), count(retry=False), count(retry=True)] == [4, 0, 2]


@pytest.mark.parametrize("name", ["gone.png", b"not-utf8-\xff.png"])
def test_what_cannot_be_opened_or_named_is_told_of(tmp_path: Path, name: Any) -> None:
    place = os.path.join(os.fsencode(tmp_path), name if isinstance(name, bytes) else name.encode())
    if name == "gone.png":
        os.symlink(b"nowhere", place)
    else:
        Path(os.fsdecode(place)).write_bytes(b"not a picture, only bytes")
    log = tmp_path / "t.jsonl"
    assert run(tmp_path, "--ledger", tmp_path / "l.sqlite", "--jsonl", log, "--jobs", 1, "--quiet") == 5
    (line,) = lines(log)
    assert line["verdict"] == "unreadable"
    assert line["error"]
    assert run(tmp_path, "--ledger", tmp_path / "l.sqlite", "--jsonl", log, "--jobs", 1, "--quiet") == 5
    assert len(lines(log)) == 1


def test_a_folder_that_cannot_be_listed_is_told_of(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    tiny_folder(tmp_path / "s", 1)
    (tmp_path / "s" / "shut").mkdir()
    whole = os.scandir

    def scandir(path: Any) -> Any:
        if str(path).endswith("shut"):
            raise PermissionError(13, "Permission denied")
        return whole(path)

    monkeypatch.setattr(os, "scandir", scandir)
    log = tmp_path / "t.jsonl"
    assert run(tmp_path / "s", "--ledger", tmp_path / "l.sqlite", "--jsonl", log, "--jobs", 1, "--quiet") == 5
    told = {d["file"]: d["error"] for d in lines(log)}
    assert told["shut"] == "is a folder that cannot be listed: check its permissions"
    assert len(told) == 2


def test_exit_codes(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    scans, ledger = tmp_path / "scans", tmp_path / "l.sqlite"
    scans.mkdir()
    shutil.copy(DEMOS / "market-flyer.png", scans)
    assert run(scans, "--ledger", ledger, "--jobs", 1, "--quiet") == 0
    assert run(scans, "--ledger", ledger, "--quiet", "--fail-on", "rescan") == 10
    assert run(tmp_path / "none", "--ledger", ledger) == 3
    assert run(scans, "--ledger", tmp_path / "no" / "l.sqlite") == 4
    assert run(scans, "--ledger", ledger, "--csv", tmp_path / "no" / "t.csv") == 4
    assert run(scans, "--ledger", ledger, "--csv", ledger) == 4
    assert run(scans, "--ledger", ledger, "--csv", scans / "market-flyer.png") == 4
    assert run(scans, "--ledger", ledger, "--report", tmp_path) == 4
    assert run(scans, "--ledger", ledger, "--jobs", 1, "--cluster", "tcp://here:1") == 2
    assert run(scans, "--jobs", 0) == 2
    capsys.readouterr()
    assert run(scans, "--ledger", ledger, "--json") == 0
    document = json.loads(capsys.readouterr().out)
    assert (document["format"], document["files"]) == ("moire.batch", 1)
    assert document["verdicts"]["rescan"] == 1


def command(scans: Path, top: Path) -> list[str]:
    outputs = [f"--{kind}={top / name}" for kind, name in OUTPUTS.items()]
    return [sys.executable, "-m", "moire", "intake", str(scans), "--jobs", "2", "--quiet", *outputs]


def wait_for(condition: Any, limit_s: float = 20.0) -> None:
    end = time.monotonic() + limit_s
    while not condition():
        assert time.monotonic() < end
        time.sleep(0.02)


def test_killed_and_resumed_every_file_is_there_once(tmp_path: Path) -> None:
    scans = tmp_path / "scans"
    paths = tiny_folder(scans, 300, broken_every=50)
    for share in (1, 60, 150):
        process = subprocess.Popen(command(scans, tmp_path), start_new_session=True)
        wait_for(lambda n=share: kept(tmp_path / "l.sqlite") >= n)
        process.kill()
        process.wait()
        assert not (tmp_path / "t.csv").exists()
        # Workers must not outlive a parent that could not tell them to stop.
        wait_for(lambda p=process: not _members(p.pid))
    before = kept(tmp_path / "l.sqlite")
    assert before < 300
    assert subprocess.run(command(scans, tmp_path), check=False).returncode == 5
    expected = sorted(str(p) for p in paths)
    assert [d["path"] for d in lines(tmp_path / "t.jsonl")] == expected
    assert [r["path"] for r in table_of(tmp_path / "t.csv")] == expected
    db = sqlite3.connect(tmp_path / "l.sqlite")
    assert [row[0] for row in db.execute("SELECT path FROM files ORDER BY path")] == expected
    assert db.execute("SELECT count(*) FROM results WHERE error <> ''").fetchone() == (6,)
    assert db.execute("PRAGMA integrity_check").fetchone() == ("ok",)
    db.close()


def _members(group: int) -> list[str]:
    """Living processes of a session, from /proc/PID/stat (field 6)."""
    out = []
    for entry in Path("/proc").iterdir():
        try:
            fields = (entry / "stat").read_text().rsplit(")", 1)[1].split() if entry.name.isdigit() else []
        except OSError:
            continue
        if len(fields) > 3 and int(fields[3]) == group and fields[0] != "Z":
            out.append(entry.name)
    return out


def test_ctrl_c_keeps_what_is_done(tmp_path: Path) -> None:
    scans = tmp_path / "scans"
    tiny_folder(scans, 300)
    process = subprocess.Popen(
        [a for a in command(scans, tmp_path) if a != "--quiet"],
        start_new_session=True, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.SIG_DFL),
    )  # fmt: skip
    wait_for(lambda: kept(tmp_path / "l.sqlite") >= 5)
    os.killpg(process.pid, signal.SIGINT)
    out, err = process.communicate(timeout=20)
    assert process.returncode == 130
    assert "the same command goes on" in " ".join(out.split())
    assert "Traceback" not in err
    assert 5 <= kept(tmp_path / "l.sqlite") <= 300
    wait_for(lambda: not _members(process.pid))


def test_a_terminal_shows_rate_time_left_and_counts(tmp_path: Path) -> None:
    pty = pytest.importorskip("pty")
    tiny_folder(tmp_path / "scans", 60, broken_every=20)
    ours, theirs = pty.openpty()
    process = subprocess.Popen(
        [a for a in command(tmp_path / "scans", tmp_path) if a != "--quiet"],
        stdout=subprocess.DEVNULL, stderr=theirs, env=os.environ | {"TERM": "xterm", "COLUMNS": "100"},
    )  # fmt: skip
    os.close(theirs)
    shown = b""
    while True:
        try:
            piece = os.read(ours, 65536)
        except OSError:  # the other end is closed
            break
        if not piece:
            break
        shown += piece
    os.close(ours)
    assert process.wait(20) == 5
    text = shown.decode()
    assert re.search(r"\d+/60", text)
    assert re.search(r"\d+/min", text)
    assert re.search(r"\d:\d\d", text)
    assert re.search(r"3 unreadable, \d+ refer", text)


def test_terms_of_a_material_change_the_verdict() -> None:
    from moire.examine import examine
    from moire.scanfile import read

    found = examine(read(DEMOS / "courier-leaf.png"))
    assert found.verdict == "mendable"
    assert under_terms(found, Terms()) is found
    assert under_terms(found, Terms(accepted=("halftone",))).verdict == "sound"
    blind = under_terms(found, Terms(visible_from=1000.0))
    assert blind.verdict == "sound"
    assert blind.visibility == pytest.approx(found.visibility)
    assert under_terms(found, Terms(visible_from=0.5)).verdict == "mendable"
