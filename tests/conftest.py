"""What all tests share: the flag for benchmarks, the field records when they are there, a quiet matplotlib."""

from __future__ import annotations

import os
from pathlib import Path

import matplotlib
import pytest

matplotlib.use("Agg")

REPOSITORY = Path(__file__).resolve().parent.parent


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--run-benchmarks", action="store_true", help="time the kernels against general libraries")


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    if config.getoption("--run-benchmarks"):
        return
    skip = pytest.mark.skip(reason="a benchmark: run with --run-benchmarks -s")
    for item in items:
        if "benchmark" in item.keywords:
            item.add_marker(skip)


@pytest.fixture(scope="session")
def field_records() -> Path:
    """Folder of real shot records, beside the repository or where ROCKHEAD_SHARED points."""
    folder = Path(os.environ.get("ROCKHEAD_SHARED", REPOSITORY.parent / "shared")) / "field_records"
    if not folder.is_dir():
        pytest.skip("no field records beside the repository")
    return folder
