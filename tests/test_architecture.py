"""The arrows between the packages: who may import whom, and what must not be loaded to show help."""

import ast
import subprocess
import sys
from pathlib import Path

import pytest

REPOSITORY = Path(__file__).resolve().parent.parent
OURS = {"picker", "interp", "synthetic_gathers"}
# the commands are the edge where everything meets
EDGE = {"interp/cli.py", "interp/demo.py", "interp/process.py", "interp/__main__.py"}
# the report shows samples, log and findings as they are: it knows them by their contracts
REPORT = {"interp/report.py", "interp/report_tables.py", "interp/report_text.py", "interp/figures_gather.py"}


def imported(path: Path) -> set[str]:
    """Every module of ours that a file imports, wherever in the file."""
    found = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module and node.level == 0:
            found.add(node.module)
    return {name for name in found if name.split(".")[0] in OURS}


def modules(package: str) -> list[Path]:
    return sorted((REPOSITORY / package).rglob("*.py"))


@pytest.mark.parametrize("path", modules("picker"), ids=lambda path: path.name)
def test_picker_imports_nothing_of_ours_but_itself(path):
    assert {name.split(".")[0] for name in imported(path)} <= {"picker"}


@pytest.mark.parametrize("path", modules("synthetic_gathers"), ids=lambda path: path.name)
def test_synthetic_gathers_imports_nothing_of_ours_but_itself(path):
    assert {name.split(".")[0] for name in imported(path)} <= {"synthetic_gathers"}


@pytest.mark.parametrize("path", modules("interp"), ids=lambda path: path.name)
def test_interp_reaches_picker_through_picks_and_survey_only(path):
    if path.relative_to(REPOSITORY).as_posix() in EDGE:
        pytest.skip("the edge")
    # a message about an input and a unit are one and the same wherever they arise
    allowed = {"picker.picks", "picker.survey", "picker.errors", "picker.units"}
    if path.relative_to(REPOSITORY).as_posix() in REPORT:
        allowed |= {"picker.records", "picker.log", "picker.findings"}
    assert {name for name in imported(path) if name.startswith("picker")} <= allowed
    assert not any(name.startswith("synthetic_gathers") for name in imported(path))


def test_help_loads_no_heavy_library():
    heavy = ["numba", "scipy", "matplotlib", "obspy", "segyio"]
    script = (
        "import sys, click.testing, interp.cli as c\n"
        "r = click.testing.CliRunner().invoke(c.main, ['--help'])\n"
        f"assert r.exit_code == 0, r.output\nprint([m for m in {heavy} if m in sys.modules])"
    )
    shown = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert shown.stdout.strip() == "[]"
