"""DepthSection as JSON text and back: everything in it, the joint samples included.

The same section gives the same bytes. Samples are kept to the millimetre and to 0.1 m/s; everything else exactly.
"""

from __future__ import annotations

import dataclasses
import json
import os
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from interp.section import Bound, DepthSection, PickFit
from picker.errors import InputError

SCHEMA = "rockhead-section"
SCHEMA_VERSION = 1
DEPTH_DECIMALS = 3
VELOCITY_DECIMALS = 1

_FLOATS = ("station_xyz", "along_m", "bound_shallow_m", "bound_deep_m", "deeper_than_m")
_INTEGERS = ("picks",)
_STRINGS = ("coverage", "note")
_FIT_INTEGERS = ("record", "channel", "branch")


def section_to_json(section: DepthSection) -> str:
    """Write a section as JSON text.

    Parameters
    ----------
    section : DepthSection
        The result; its `settings` hold plain JSON types.

    Returns
    -------
    str
        One JSON object, ASCII, ending in a line feed; unknown numbers are null. Its `summary` repeats medians and
        90 % intervals for readers that do not want the samples; `section_from_json` does not read it.
    """
    section = dataclasses.replace(
        section,
        depth_samples_m=np.round(section.depth_samples_m, DEPTH_DECIMALS),
        velocity_samples_m_s=np.round(section.velocity_samples_m_s, VELOCITY_DECIMALS),
    )
    document: dict[str, Any] = {"schema": SCHEMA, "version": SCHEMA_VERSION, "layers": section.layers}
    document["summary"] = {
        "depth_m": _plain(np.round(section.depth_m, DEPTH_DECIMALS)),
        "depth_interval_90_m": _plain(np.round(section.depth_interval_90_m, DEPTH_DECIMALS)),
        "velocity_m_s": _plain(np.round(section.velocity_m_s, VELOCITY_DECIMALS)),
        "velocity_interval_90_m_s": _plain(np.round(section.velocity_interval_90_m_s, VELOCITY_DECIMALS)),
    }
    for name in (*_FLOATS, *_INTEGERS, *_STRINGS):
        document[name] = _plain(getattr(section, name))
    document["rms_misfit_s"] = _number(section.rms_misfit_s)
    document["chi2_per_pick"] = _number(section.chi2_per_pick)
    document["refractor_probability"] = [
        {"refractors": int(count), "probability": _number(value)}
        for count, value in sorted(section.refractor_probability.items())
    ]
    document["shot_shift"] = [
        {"record": int(record), "shift_s": _number(shift), "sigma_s": _number(sigma)}
        for record, (shift, sigma) in sorted(section.shot_shift_s.items())
    ]
    document["bounds"] = [
        {key: _number(value) if isinstance(value, float) else value for key, value in dataclasses.asdict(bound).items()}
        for bound in section.bounds
    ]
    document["warnings"] = list(section.warnings)
    document["settings"] = section.settings
    document["fit"] = {column.name: _plain(getattr(section.fit, column.name)) for column in dataclasses.fields(PickFit)}
    document["depth_samples_m"] = _plain(section.depth_samples_m)
    document["velocity_samples_m_s"] = _plain(section.velocity_samples_m_s)
    return json.dumps(document, allow_nan=False, separators=(",", ":")) + "\n"


def section_from_json(text: str, *, file: str | os.PathLike[str] | None = None) -> DepthSection:
    """Read a section from JSON text.

    Parameters
    ----------
    text : str
        What `section_to_json` wrote.
    file : path, optional
        Where the text came from, for messages.

    Returns
    -------
    DepthSection
        Equal to the one written, its samples rounded.

    Raises
    ------
    InputError
        If the text is not JSON, not a section, of a later version, or its parts do not fit together.
    """
    try:
        document = json.loads(text)
    except ValueError as error:
        raise InputError(
            f"not JSON ({error})", file=file, remedy="Write it again with `rockhead export SURVEY DIR`."
        ) from error
    if not isinstance(document, dict) or document.get("schema") != SCHEMA:
        found = document.get("schema") if isinstance(document, dict) else type(document).__name__
        raise InputError("not a depth section", file=file, expected=f"schema {SCHEMA!r}", found=repr(found))
    if document.get("version") != SCHEMA_VERSION:
        raise InputError(
            "a version of the section format that this program does not read",
            file=file,
            expected=SCHEMA_VERSION,
            found=document.get("version"),
            remedy="Read it with the version of rockhead that wrote it, or interpret the survey again.",
        )
    try:
        return _section(document)
    except (KeyError, TypeError, ValueError) as error:
        what = f"{error} is missing" if isinstance(error, KeyError) else str(error)
        raise InputError(
            f"the parts of the section do not fit together ({what})",
            file=file,
            remedy="Write it again with `rockhead export SURVEY DIR`.",
        ) from error


def read_section_json(path: str | os.PathLike[str]) -> DepthSection:
    """Read `section.json`.

    Parameters
    ----------
    path : path
        The file.

    Returns
    -------
    DepthSection
        The result that was written.

    Raises
    ------
    InputError
        If the file cannot be read or is not a section.
    """
    try:
        text = Path(path).read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"cannot be read ({error})", file=path) from error
    return section_from_json(text, file=path)


def _section(document: dict[str, Any]) -> DepthSection:
    """Build the section from a document whose schema is known."""
    layers, stations = int(document["layers"]), len(document["along_m"])
    fit: dict[str, Any] = {}
    for column in dataclasses.fields(PickFit):
        kind = np.int64 if column.name in _FIT_INTEGERS else np.float64
        fit[column.name] = np.array(document["fit"][column.name], dtype=kind)
    arrays: dict[str, Any] = {name: np.array(document[name], dtype=np.float64) for name in _FLOATS}
    arrays |= {name: np.array(document[name], dtype=np.int64) for name in _INTEGERS}
    arrays |= {name: np.array(document[name], dtype=np.str_) for name in _STRINGS}
    if layers == 0:  # nested lists of nothing lose their shape
        for name in (*_FLOATS[2:], *_INTEGERS, *_STRINGS):
            arrays[name] = arrays[name].reshape(0, stations)
    return DepthSection(
        **arrays,
        depth_samples_m=np.array(document["depth_samples_m"], dtype=np.float64).reshape(-1, layers, stations)
        if layers
        else np.empty((len(document["depth_samples_m"]), 0, stations)),
        velocity_samples_m_s=np.array(document["velocity_samples_m_s"], dtype=np.float64),
        fit=PickFit(**fit),
        rms_misfit_s=_float(document["rms_misfit_s"]),
        chi2_per_pick=_float(document["chi2_per_pick"]),
        refractor_probability={
            int(row["refractors"]): _float(row["probability"]) for row in document["refractor_probability"]
        },
        shot_shift_s={
            int(row["record"]): (_float(row["shift_s"]), _float(row["sigma_s"])) for row in document["shot_shift"]
        },
        bounds=tuple(
            Bound(
                along_m=_float(row["along_m"]),
                layer=int(row["layer"]),
                kind=str(row["kind"]),
                assumption=str(row["assumption"]),
                depth_shallow_m=_float(row["depth_shallow_m"]),
                depth_deep_m=_float(row["depth_deep_m"]),
            )
            for row in document["bounds"]
        ),
        warnings=tuple(str(text) for text in document["warnings"]),
        settings=dict(document["settings"]),
    )


def _plain(array: npt.NDArray[Any]) -> Any:
    """Nested lists of an array; what is not finite is None, and no zero is negative."""
    if array.dtype.kind != "f":
        return array.tolist()
    values = array + 0.0  # -0.0 becomes 0.0
    finite = np.isfinite(values)
    if finite.all():
        return values.tolist()
    nullable = values.astype(object)
    nullable[~finite] = None
    return nullable.tolist()


def _number(value: float) -> float | None:
    """Give a plain number, None where it is not finite."""
    return float(value) if np.isfinite(value) else None


def _float(value: float | None) -> float:
    """Take a number of the document, NaN where it is null."""
    return float("nan") if value is None else float(value)
