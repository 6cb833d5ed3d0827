"""The house stands straight: file lengths, floors, light imports, public names, docstrings."""

import ast
import importlib
import inspect
import re
import subprocess
import sys
from pathlib import Path

import pytest

import moire

TOP = Path(__file__).resolve().parents[1]
FILES = sorted((TOP / "moire").rglob("*.py"))
HEAVY = ("cv2", "scipy", "skimage", "PIL", "tifffile", "rich", "jinja2", "msgspec", "numpy")


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(TOP)))
def test_a_file_holds_one_noun(path: Path) -> None:
    assert len(path.read_text().splitlines()) <= 350
    assert path.stem not in ("utils", "util", "helpers", "common", "misc")
    assert ast.get_docstring(ast.parse(path.read_text()))


def test_a_bare_import_is_light() -> None:
    code = f"import sys, moire; print([m for m in {HEAVY!r} if m in sys.modules])"
    shown = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert shown.stdout.strip() == "[]"


def test_help_is_light() -> None:
    code = (
        "import sys\nfrom moire.cli.main import main\ntry: main(['--help'])\nexcept SystemExit: pass\n"
        f"print([m for m in {HEAVY!r} if m in sys.modules])"
    )
    shown = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert shown.stdout.strip().endswith("[]")


def test_public_names_are_there_and_documented() -> None:
    for name in moire.__all__:
        value = getattr(moire, name)
        assert callable(value) or name == "__version__"
        if callable(value):
            assert "Parameters" in (inspect.getdoc(value) or "")
    # Loading the room of the same name must not hide the function.
    importlib.import_module("moire.examine")
    assert callable(moire.examine)


def test_every_command_and_flag_is_described_in_the_readme_or_docs() -> None:
    text = (TOP / "README.md").read_text() + (TOP / "docs" / "commands.md").read_text()
    for path in (TOP / "moire" / "cli").glob("*.py"):
        for flag in re.findall(r'"(--[a-z][a-z-]+)"', path.read_text()):
            assert flag in text, flag


def test_core_neither_prints_nor_reads_a_clock() -> None:
    people = {"cli", "templates"}
    timed = {
        "station",
        "crew",
        "watch",
    }  # time limits and stamps of batch work, on the floor of files and machines
    for path in FILES:
        if path.parent.name in people or path.name == "__main__.py":
            continue
        tree = ast.parse(path.read_text())
        called = {
            n.func.id for n in ast.walk(tree) if isinstance(n, ast.Call) and isinstance(n.func, ast.Name)
        }
        assert "print" not in called, path
        imported = {a.name for n in ast.walk(tree) if isinstance(n, ast.Import) for a in n.names}
        assert path.stem in timed or not imported & {"time", "datetime"}, path
