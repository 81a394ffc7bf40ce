"""The demo: the records of an invented survey written out, and the result set beside the truth."""

from __future__ import annotations

import filecmp
import os
import tempfile
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from picker.errors import InputError
from picker.units import columns_in

if TYPE_CHECKING:
    from interp.section import DepthSection
    from synthetic_gathers.gathers import RecordedSurvey

FOLDER = "rockhead-demo"
RECORDS = "records"
RESULT = "result"


def write_records(directory: Path, seed: int) -> tuple[RecordedSurvey, list[Path]]:
    """Write the demo survey as its crew would hand it over, with the truth in a subfolder.

    Parameters
    ----------
    directory : Path
        The folder of the records; made where it is not there. Records of an earlier run are left as they are.
    seed : int
        Seed of the field noise.

    Returns
    -------
    recorded : RecordedSurvey
        The records with their truth.
    files : list of Path
        The SEG-Y files, in the order of the shots.

    Raises
    ------
    InputError
        If the folder holds other records, from another seed for instance.
    """
    from synthetic_gathers.demo_survey import write_demo

    directory.parent.mkdir(parents=True, exist_ok=True)
    with tempfile.TemporaryDirectory(prefix=".records.", dir=directory.parent) as beside:
        made = Path(beside) / RECORDS
        recorded = write_demo(made, seed)
        names = sorted(path.name for path in made.glob("*.sgy"))
        if not directory.exists():
            os.rename(made, directory)
        else:
            _, differing, missing = filecmp.cmpfiles(made, directory, names, shallow=False)
            if differing or missing:
                raise InputError(
                    "is there already and does not hold the demo records of this seed",
                    file=directory,
                    expected=f"{len(names)} SEG-Y files of seed {seed}",
                    found=f"{len(differing)} other and {len(missing)} missing",
                    remedy="Name another folder: rockhead demo DIR",
                )
    return recorded, [directory / name for name in names]


def compared_with_truth(recorded: RecordedSurvey, section: DepthSection, units: str) -> str:
    """Say in one sentence how the result stands against the truth.

    Parameters
    ----------
    recorded : RecordedSurvey
        The records with their truth.
    section : DepthSection
        The result.
    units : str
        `m` or `ft`.

    Returns
    -------
    str
        How many of the 90 % intervals hold the truth, and how far off the medians are.
    """
    survey = recorded.survey
    true_m = np.interp(section.along_m, survey.receiver_x_m - survey.receiver_x_m[0], survey.depth_m[0])
    low, high = section.depth_interval_90_m[:, 0]
    told = np.isfinite(low)
    if not told.any():
        return "The truth: there is a refractor, and the result does not tell of it."
    held = int(np.sum((true_m >= low) & (true_m <= high) & told))
    error_m = np.abs(section.depth_m[0] - true_m)[told]
    size = columns_in(units, {"middle_m": np.median(error_m), "most_m": error_m.max()})
    middle, most = (float(value) for value in size.values())
    velocities = []
    for layer, true_m_s in enumerate(1 / np.mean(1 / survey.velocity_m_s, axis=1)):
        mean_m_s = 1 / np.mean(1 / section.velocity_samples_m_s[:, layer, :], axis=1)
        ends_m_s = np.quantile(mean_m_s, (0.05, 0.95))
        (shown,) = columns_in(units, {"velocity_m_s": np.array([true_m_s, *ends_m_s])}).values()
        velocities.append("{:.0f} {units}/s (told {:.0f} to {:.0f})".format(*shown.tolist(), units=units))
    return (
        f"The truth: {held} of {int(told.sum())} depth intervals hold the true depth (9 in 10 should, over many "
        f"such lines); the middle error in depth is {middle:.2f} {units}, the worst {most:.2f} {units}; the true "
        f"velocities are {' and '.join(velocities)}."
    )
