"""A profile is strict, names what is wrong, and rules by material."""

import shutil
from pathlib import Path

import pytest

from moire.cli.main import main
from moire.errors import BadRequest
from moire.examine import examine
from moire.outcome import Terms, under_terms
from moire.profile import read_profile
from moire.scanfile import read

DEMOS = Path(__file__).resolve().parents[1] / "demo_images"
WHOLE = """
scanner_ppi = [300, 700]
fail_on = ["rescan"]
visible_from = 2.0

[[material]]
name = "newspapers"
folders = ["press/*", "*/press/*"]
ppi = 400
viewing = "print"
accept = ["banding", "block-grid"]
fail_on = ["refer"]

[[material]]
name = "rest"
folders = ["*.tif"]

[on]
rescan = ["call", "{path}"]
"""


def write(folder: Path, text: str) -> Path:
    path = folder / "bureau.toml"
    path.write_text(text)
    return path


def test_the_first_material_that_matches_rules(tmp_path: Path) -> None:
    profile = read_profile(write(tmp_path, WHOLE))
    press = profile.terms_of("press/1/2.png", given=Terms())
    assert press == Terms(
        ppi=(400.0, 400.0),
        viewing="print",
        visible_from=2.0,
        accepted=("banding", "block-grid"),
        scanner_ppi=(300.0, 700.0),
        material="newspapers",
    )
    assert profile.terms_of("a/press/x.tif", given=Terms()).material == "newspapers"
    assert profile.terms_of("a/b.tif", given=Terms()).material == "rest"
    other = profile.terms_of("a/b.png", given=Terms(ppi=(600.0, 600.0)))
    assert (other.material, other.ppi, other.viewing, other.visible_from) == (
        "",
        (600.0, 600.0),
        "monitor",
        2.0,
    )
    assert profile.terms_of("press/1.png", given=Terms(ppi=(600.0, 600.0))).ppi == (600.0, 600.0)
    assert profile.stops("newspapers", "refer")
    assert not profile.stops("newspapers", "rescan")
    assert profile.stops("rest", "rescan")
    assert profile.stops("", "rescan")


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("scaner_ppi = [300]", "unknown key `scaner_ppi`"),
        ('viewing = "moon"', "viewing: unknown word 'moon': give monitor, print"),
        ('fail_on = ["bad"]', r"fail_on\[0\]: unknown word 'bad': give sound, mendable"),
        ('accept = ["smudge"]', r"accept\[0\]: unknown word 'smudge': give halftone, alias"),
        ('[[material]]\nname = "a"\nfolders = ["x"]\nppi = "3"', r"material\[0\].ppi: Expected `float`, got"),
        ('[[material]]\nname = "a"', r"material\[0\]: missing key `folders`"),
        ('[[material]]\nname = "a"\nfolders = []', r"material\[0\]: name and folders must not be empty"),
        ('[[material]]\nname = "a"\nfolders = ["x"]\nvisible_from = 0', r"material\[0\]: visible_from is 0"),
        ('[[material]]\nname = "a"\nfolders = ["x"]\n' * 2, "material.name: 'a' occurs twice"),
        ("ppi = 3", "ppi is 3: give 10 to 20000"),
        ("scanner_ppi = [3]", "scanner_ppi: give rates"),
        ("[on]\nrescan = []", "on.rescan is empty"),
        ('[on]\nrescan = "call me"', "on.*: Expected `array`, got `str`"),
        ('[on]\nbad = ["x"]', "on: unknown word 'bad'"),
        ("ppi = ", "not TOML"),
    ],
)  # fmt: skip
def test_what_is_wrong_is_named_with_file_and_key(tmp_path: Path, text: str, said: str) -> None:
    with pytest.raises(BadRequest, match=f"bureau.toml: .*{said}"):
        read_profile(write(tmp_path, text))


def test_a_profile_that_is_not_there(tmp_path: Path) -> None:
    with pytest.raises(BadRequest, match=r"none\.toml: cannot be read"):
        read_profile(tmp_path / "none.toml")


def test_advice_names_a_rate_that_the_scanner_has() -> None:
    found = examine(read(DEMOS / "market-flyer.png"))
    assert any("Rescan at 600 ppi" in line for line in found.advice)
    advice = under_terms(found, Terms(scanner_ppi=(300.0, 700.0))).advice
    assert any("Rescan at 700 ppi" in line for line in advice)
    assert len(advice) == len(found.advice)


def test_the_commands_exit_code_follows_the_profile(tmp_path: Path) -> None:
    for folder in ("press", "art"):
        (tmp_path / "scans" / folder).mkdir(parents=True)
    shutil.copy(DEMOS / "market-flyer.png", tmp_path / "scans" / "press")

    def code(text: str) -> int:
        with pytest.raises(SystemExit) as stop:
            main(["intake", str(tmp_path / "scans"), "--ledger", str(tmp_path / "l.sqlite"), "--quiet",
                  "--profile", str(write(tmp_path, text))])  # fmt: skip
        return int(stop.value.code or 0)

    press = '[[material]]\nname = "press"\nfolders = ["press/*"]\n'
    assert code('fail_on = ["rescan"]') == 10
    assert code('fail_on = ["rescan"]\n' + press + "fail_on = []") == 0
    assert code(press + 'fail_on = ["rescan"]') == 10
    assert code(press + 'accept = ["alias"]\nfail_on = ["rescan"]') == 0
    assert code("nothing = 1") == 2
