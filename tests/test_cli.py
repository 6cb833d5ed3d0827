"""The commands as people and scripts run them: output, JSON, exit codes."""

import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

import moire
from moire.cli.main import main

DEMOS = Path(__file__).resolve().parents[1] / "demo_images"
LEAF = str(DEMOS / "courier-leaf.png")
FINDING_KEYS = {"kind", "confidence", "visibility", "coverage", "regions", "lines", "period_px", "period_mm",
                "screen", "weave", "candidates", "settled", "parents", "evidence"}  # fmt: skip
EXAMINATION_KEYS = {"format", "version", "file", "sha256", "width_px", "height_px", "channels", "bit_depth",
                    "ppi", "ppi_source", "ppi_in_file", "viewing", "verdict", "visibility", "advice",
                    "findings"}  # fmt: skip


def run(*arguments: object) -> int:
    with pytest.raises(SystemExit) as stop:
        main([str(a) for a in arguments])
    return int(stop.value.code or 0)


@pytest.fixture
def examined(capsys: pytest.CaptureFixture[str]) -> dict[str, Any]:
    assert run("examine", LEAF, "--json") == 0
    return json.loads(capsys.readouterr().out)  # type: ignore[no-any-return]


def test_examine_json_has_the_stated_keys(examined: dict[str, Any]) -> None:
    assert set(examined) >= EXAMINATION_KEYS
    assert (examined["format"], examined["version"]) == ("moire.examination", 1)
    (finding,) = examined["findings"]
    assert set(finding) >= FINDING_KEYS
    assert set(finding["lines"][0]) >= {"fx_cpp", "fy_cpp", "sigma_cpp", "amplitude", "snr_db", "order"}
    screen = finding["screen"]
    assert screen["ruling_lpi"] == pytest.approx(85, rel=1e-3)
    assert screen["angle_deg"] == pytest.approx(44.5, abs=0.02)
    assert examined["ppi"] == [300.0, 300.0]
    assert examined["ppi_source"] == "file"


def test_json_is_alone_on_stdout(capsys: pytest.CaptureFixture[str]) -> None:
    run("examine", LEAF, "--json")
    out, err = capsys.readouterr()
    json.loads(out)
    assert "Verdict" in err


def test_text_fits_80_columns(capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("COLUMNS", "80")
    run("examine", str(DEMOS / "harbour-postcard.png"))
    lines = capsys.readouterr().out.splitlines()
    assert max(map(len, lines)) <= 80
    assert any("magenta" in line for line in lines)


def test_quiet_is_quiet(capsys: pytest.CaptureFixture[str]) -> None:
    assert run("examine", LEAF, "--quiet") == 0
    assert capsys.readouterr() == ("", "")


def test_a_named_verdict_is_an_exit_code() -> None:
    assert run("examine", LEAF, "--quiet", "--fail-on", "mendable") == 10
    assert run("examine", LEAF, "--quiet", "--fail-on", "rescan", "--fail-on", "refer") == 0


def test_a_given_rate_wins(capsys: pytest.CaptureFixture[str]) -> None:
    run("examine", LEAF, "--ppi", "600x600", "--json")
    found = json.loads(capsys.readouterr().out)
    assert found["ppi"] == [600.0, 600.0]
    assert found["ppi_in_file"] == [300.0, 300.0]
    assert found["findings"][0]["screen"]["ruling_lpi"] == pytest.approx(170, rel=1e-3)


@pytest.mark.parametrize(
    ("arguments", "code"),
    [
        (["examine"], 2),
        (["examine", LEAF, "--ppi", "many"], 2),
        (["examine", LEAF, "--viewing", "moon"], 2),
        (["examine", "no-such-file.tif"], 3),
        (["mend", "no-such-file.tif", "-o", "x.png"], 3),
        (["mend", LEAF, "-o", "no/such/folder/x.png"], 4),
        (["mend", LEAF, "-o", "x.gif"], 4),
        (["mend", LEAF, "-o", LEAF, "--force"], 4),
        (["mend", LEAF, "-o", "x.png", "--to-ppi", "9000"], 2),
        (["mend", LEAF, "-o", "x.png", "--recipe", LEAF], 2),
        (["proof", "-o", "x.png", "--screen", "133"], 2),
        (["proof", "-o", "x.png", "--screen", "133@45:gold"], 2),
        (["proof", "-o", "x.png", "--cloth", "18:plain"], 2),
        (["polish"], 2),
    ],
)
def test_exit_codes(
    arguments: list[str],
    code: int,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(tmp_path)
    assert run(*arguments) == code
    assert "Traceback" not in capsys.readouterr().err
    assert list(tmp_path.iterdir()) == []


def test_mend_writes_derivative_report_and_recipe(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    out, report, recipe = tmp_path / "m.tif", tmp_path / "r.html", tmp_path / "leaf.json"
    before = Path(LEAF).read_bytes()
    assert run("mend", LEAF, "-o", out, "--quick", "--report", report, "--save-recipe", recipe, "--json") == 0
    document = json.loads(capsys.readouterr().out)
    assert set(document) >= {"before", "after", "recipe", "measures", "output_sha256"}
    assert Path(LEAF).read_bytes() == before
    assert "m.tif" in report.read_text(encoding="utf-8")
    assert document["output_sha256"] in report.read_text(encoding="utf-8")
    assert moire.read(out).ppi == (300, 300)
    again = tmp_path / "again.tif"
    assert run("mend", LEAF, "-o", again, "--recipe", recipe, "--quiet") == 0
    assert (moire.read(again).pixels == moire.read(out).pixels).all()


def test_outputs_are_not_overwritten_without_force(tmp_path: Path) -> None:
    out = tmp_path / "m.png"
    assert run("mend", LEAF, "-o", out, "--quick", "--quiet") == 0
    assert run("mend", LEAF, "-o", out, "--quick", "--quiet") == 4
    assert run("mend", LEAF, "-o", out, "--quick", "--quiet", "--force") == 0


def test_proof_tells_its_truth(tmp_path: Path) -> None:
    out = tmp_path / "p.png"
    assert (
        run("proof", "-o", out, "--screen", "100@30:black", "--size", "0.8x0.6", "--turn", "5", "--quiet")
        == 0
    )
    truth = json.loads((tmp_path / "p.truth.json").read_text())
    (screen,) = truth["screens"]
    assert screen["ruling_lpi"] == 100
    assert screen["angle_deg"] == 35
    assert screen["angle_on_sheet_deg"] == 30
    assert (
        moire.read(tmp_path / "p.unscreened.png").pixels.shape
        == moire.read(out).pixels.shape
        == (180, 240, 3)
    )


def test_proof_is_repeatable(tmp_path: Path) -> None:
    for name in ("a.png", "b.png"):
        run("proof", "-o", tmp_path / name, "--size", "0.5x0.4", "--seed", "4", "--quiet")
    assert (tmp_path / "a.png").read_bytes() == (tmp_path / "b.png").read_bytes()


def test_help_has_an_example_for_every_command(capsys: pytest.CaptureFixture[str]) -> None:
    for command in ("examine", "mend", "intake", "proof"):
        assert run(command, "--help") == 0
        assert f"moire {command} " in capsys.readouterr().out


def test_version_and_module_entry() -> None:
    shown = subprocess.run(
        [sys.executable, "-m", "moire", "--version"], capture_output=True, text=True, check=True
    )
    assert moire.__version__ in shown.stdout
