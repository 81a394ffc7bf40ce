"""README is true: its commands run as they stand there, its library example too, and its columns are those written."""

from __future__ import annotations

import glob
import re
import runpy
import shlex
import struct
from pathlib import Path

import pytest
from click.testing import CliRunner

from interp.cli import main

README = Path(__file__).resolve().parent.parent / "README.md"
TEXT = README.read_text(encoding="utf-8")


def blocks(language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```$", TEXT, flags=re.MULTILINE | re.DOTALL)


def columns_told(name: str) -> list[str]:
    """The first cells of the table under a file's name."""
    section = re.search(rf"^\*\*{re.escape(name)}\*\*.*?\n\n(.*?)\n\n", TEXT, flags=re.MULTILINE | re.DOTALL)
    assert section is not None, name
    firsts = [row.split("|")[1] for row in section[1].splitlines()[2:]]
    return [column for first in firsts for column in re.findall(r"`(\w+)`", first)]


@pytest.fixture(scope="module")
def worked(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder in which the demo and then every command of README were run, in their order."""
    folder = tmp_path_factory.mktemp("readme")
    with pytest.MonkeyPatch.context() as patch:
        patch.chdir(folder)
        for line in ["rockhead demo", *"".join(blocks("sh")).splitlines()]:
            program, *words = shlex.split(line)
            assert program == "rockhead", line
            arguments = [name for word in words for name in (sorted(glob.glob(word)) if "*" in word else [word])]
            result = CliRunner().invoke(main, arguments)
            # 1 is done, with findings to look at
            assert result.exit_code in (0, 1), f"{line}\n{result.output}"
    return folder


@pytest.mark.slow
def test_every_command_of_readme_runs_as_it_stands(worked):
    for made in ("result/report.html", "report/report.html", "tables/depths.csv", "from_picks/depths.csv"):
        assert (worked / made).stat().st_size > 0
    by_hand, by_demo = (worked / folder / "depths.csv" for folder in ("result", "rockhead-demo/result"))
    assert by_hand.read_bytes() == by_demo.read_bytes()


@pytest.mark.slow
def test_the_library_example_is_under_ten_lines_and_writes_the_depths_of_the_demo(worked, monkeypatch):
    (example,) = blocks("python")
    assert len(example.splitlines()) < 10
    monkeypatch.chdir(worked)
    (worked / "example.py").write_text(example)
    runpy.run_path(str(worked / "example.py"))
    there, by_command = ((worked / name).read_text() for name in ("depths.csv", "rockhead-demo/result/depths.csv"))
    pairs = list(zip(there.splitlines(), by_command.splitlines(), strict=True))
    assert pairs[0][0] == pairs[0][1]
    for mine, theirs in pairs[1:]:
        # section.json keeps millimetres, so that a centimetre may round the other way
        assert float(mine.split(",")[5]) == pytest.approx(float(theirs.split(",")[5]), abs=0.0101)


@pytest.mark.slow
@pytest.mark.parametrize("name", ["depths.csv", "velocities.csv", "bounds.csv", "picks.csv"])
def test_columns_in_readme_are_those_of_the_file_in_order(worked, name):
    header = (worked / "result" / name).read_text().splitlines()[0].split(",")
    assert columns_told(name) == header


def test_every_command_has_its_row_in_readme():
    told = re.findall(r"^\| `rockhead (\w+)", TEXT, flags=re.MULTILINE)
    assert sorted(told) == sorted(main.commands)


def test_files_and_pictures_that_readme_names_are_there():
    links = [target for target in re.findall(r"\]\(([^)]+)\)", TEXT) if not target.startswith("http")]
    assert links
    assert [target for target in links if not (README.parent / target).is_file()] == []


def test_the_picture_of_readme_is_small_enough_to_ship():
    (picture,) = re.findall(r"!\[[^]]*\]\(([^)]+)\)", TEXT)
    content = (README.parent / picture).read_bytes()
    assert content.startswith(b"\x89PNG")
    width, height = struct.unpack(">II", content[16:24])
    assert min(width, height) > 300
    assert len(content) < 200_000
