"""``moire plan`` as people and scripts run it: text, JSON, chart, exit codes."""

import json
import xml.etree.ElementTree as ElementTree
from pathlib import Path

import pytest

from moire.cli.main import main

DEMOS = Path(__file__).resolve().parents[1] / "demo_images"
ONE = ("plan", "--ruling", "133", "--angles", "45")
FOUR = ("plan", "--ruling", "133", "--angles", "15,75,0,45")


def run(*arguments: object) -> int:
    with pytest.raises(SystemExit) as stop:
        main([str(a) for a in arguments])
    return int(stop.value.code or 0)


@pytest.mark.parametrize("extra", [("--ppi", "200,300,400,600,1200"), ("--ppi", "150-1200", "--turn", "0,5")])
def test_text_fits_80_columns(
    extra: tuple[str, ...], capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("COLUMNS", "80")
    assert run(*FOUR, *extra) == 0
    text = capsys.readouterr().out
    assert max(map(len, text.splitlines())) <= 80
    for word in ("best", "worst", "magenta", "52.36/cm", "keeper", "Rule of the trade"):
        assert word in text


def test_json_has_the_stated_keys(capsys: pytest.CaptureFixture[str]) -> None:
    assert run(*FOUR, "--ppi", "300,600x400", "--json") == 0
    made = json.loads(capsys.readouterr().out)
    assert (made["format"], made["version"]) == ("moire.plan", 1)
    assert made["recommended"] == 0
    assert made["why"]
    for choice in made["choices"]:
        assert set(choice) >= {"ppi", "turn_deg", "beats", "visibility", "verdict"}
        for beat in choice["beats"]:
            assert set(beat) >= {"orders", "frequency_cpi", "period_mm", "amplitude", "visibility", "source"}
    assert [600, 400] in [c["ppi"] for c in made["choices"]]


def test_quiet_is_quiet(capsys: pytest.CaptureFixture[str]) -> None:
    assert run(*ONE, "--ppi", "600", "--quiet") == 0
    assert capsys.readouterr() == ("", "")


def test_a_chart_is_one_sound_svg_with_the_beats_named(tmp_path: Path) -> None:
    chart = tmp_path / "c.svg"
    assert run(*ONE, "--ppi", "200,300,400,600", "--chart", chart, "--quiet") == 0
    root = ElementTree.fromstring(chart.read_text())
    words = " ".join(t.text or "" for t in root.iter("{http://www.w3.org/2000/svg}text"))
    assert "of black, folded" in words
    assert "600 ppi" in words
    assert run(*ONE, "--ppi", "200,300", "--chart", chart, "--quiet") == 4
    assert run(*ONE, "--ppi", "200,300", "--chart", chart, "--quiet", "--force") == 0


def test_a_measured_scan_and_its_derivatives(capsys: pytest.CaptureFixture[str]) -> None:
    leaf = DEMOS / "courier-leaf.png"
    code = run("plan", "--from", leaf, "--derivative-ppi", "100,200", "--kernel", "pillow-lanczos", "--json")
    assert code == 0
    made = json.loads(capsys.readouterr().out)
    assert made["patterns"][0]["frequencies_lpi"][0] == pytest.approx(85, rel=1e-3)
    assert made["choices"][0]["master_ppi"] == [300, 300]


def test_cloth(capsys: pytest.CaptureFixture[str]) -> None:
    assert run("plan", "--ends", "18", "--picks", "16", "--weave", "twill", "--ppi", "72,300") == 0
    assert "2/2 twill Z weave, 18.00 ends by 16.00 picks/cm" in capsys.readouterr().out


def test_the_best_choice_can_fail_a_script() -> None:
    assert run(*ONE, "--ppi", "1200", "--quiet", "--fail-on", "mendable") == 10
    assert run(*ONE, "--ppi", "1200", "--quiet", "--fail-on", "rescan") == 0


@pytest.mark.parametrize(
    ("arguments", "code"),
    [
        (("plan",), 2),
        (("plan", "--ruling", "133", "--ppi", "300"), 2),
        (("plan", "--ruling", "133", "--angles", "45"), 2),
        (("plan", "--ruling", "many", "--angles", "45", "--ppi", "300"), 2),
        (("plan", "--ruling", "133", "--angles", "45", "--ends", "3", "--picks", "3", "--ppi", "300"), 2),
        (("plan", "--ends", "18", "--ppi", "300"), 2),
        (("plan", "--screen", "133@45:gold", "--ppi", "300"), 2),
        ((*ONE, "--ppi", "300-200"), 2),
        ((*ONE, "--ppi", "300", "--turn", "north"), 2),
        ((*ONE, "--ppi", "300", "--reprint", "150"), 2),
        ((*ONE, "--ppi", "300", "--derivative-ppi", "600"), 2),
        ((*ONE, "--derivative-ppi", "100"), 2),
        ((*ONE, "--ppi", "300", "--chart", "no/such/folder/c.svg"), 4),
        (("plan", "--from", "no-such-file.tif", "--ppi", "300"), 3),
    ],
)
def test_exit_codes(
    arguments: tuple[str, ...],
    code: int,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(tmp_path)
    assert run(*arguments) == code
    assert "Traceback" not in capsys.readouterr().err
    assert list(tmp_path.iterdir()) == []
