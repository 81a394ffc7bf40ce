"""Lengths in feet where numbers enter or leave; everything inside the program is metres."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import numpy.typing as npt

METRES_PER_FOOT = 0.3048  # the international foot, exact by definition (1959 agreement)
UNITS = ("m", "ft")


def columns_in(units: str, columns: Mapping[str, npt.ArrayLike]) -> dict[str, npt.NDArray[np.generic]]:
    """Columns of a table in the units they are to be read in, their names changed to say so.

    Parameters
    ----------
    units : str
        `m` leaves everything as it is; `ft` turns `..._m` into `..._ft`, `..._m_s` into `..._ft_s` and
        `..._s_m` into `..._s_ft` (international feet).
    columns : mapping of str to array
        Columns by name, lengths in metres.

    Returns
    -------
    dict of str to array
        The columns in the order they came in. Names without a length in them are passed on unchanged.

    Raises
    ------
    ValueError
        If the units are neither `m` nor `ft`.
    """
    if units not in UNITS:
        raise ValueError(f"units: expected one of {UNITS}, found {units!r}")
    if units == "m":
        return {name: np.asarray(values) for name, values in columns.items()}
    converted: dict[str, npt.NDArray[np.generic]] = {}
    for name, values in columns.items():
        array = np.asarray(values)
        if name.endswith("_m_s"):
            converted[f"{name[:-4]}_ft_s"] = array / METRES_PER_FOOT
        elif name.endswith("_s_m"):
            converted[f"{name[:-4]}_s_ft"] = array * METRES_PER_FOOT
        elif name.endswith("_m"):
            converted[f"{name[:-2]}_ft"] = array / METRES_PER_FOOT
        else:
            converted[name] = array
    return converted
