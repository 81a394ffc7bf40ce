"""The demo survey: Larch Rise, a refraction line for a buried water tank. An invented scenario.

What is being built
-------------------
A farming village wants a drinking-water tank of concrete, 32 m long and 3 m high, buried in a dry gravel slope so
that only its hatch shows. Its floor is to lie 5 m below ground, between x = 34 m and x = 66 m of the line.

What the client needs to know
-----------------------------
1. How deep is the rock under the tank? Down to 5 m the digger works in soil; above that it must break rock.
2. Does the rock lie at one depth, or does an old, filled channel cross the site? A tank half on rock and half on
   loose fill settles unevenly and cracks: then it is moved along the line, or the fill is replaced by lean concrete.
3. Can the rock be ripped? At 2,000 to 2,500 m/s it is near the limit of a middle-sized machine (common practice,
   no source); the tender must say which.

The line
--------
48 vertical geophones at 2 m, x = 0 to 94 m, over a slope that rises by about 3 m. Eleven shots with a hammer on a
plate: seven along the spread, from 1 m beyond one end to 1 m beyond the other, and far shots at x = -31, -15, 109 and
125 m, so that rock is crossed in both directions under every geophone.

The ground (the truth)
----------------------
Dry gravel and topsoil, one layer of 520 m/s, over weathered to sound slate of 2,450 m/s. Rock lies 4 to 5 m deep under
the lower part of the slope, dips into a gentle filled channel whose floor is about 10.5 m below ground near
x = 60 m (under the tank), and comes up to 6 to 7 m beyond it. The water table lies in the rock.

How the records were made
-------------------------
The clean gathers were computed once with `elastic.simulate` and are shipped in `demo/`; `python -m
synthetic_gathers.make_demo` makes them again. Field noise is added when the demo is written.
"""

from __future__ import annotations

import dataclasses
import os
from collections.abc import Callable
from pathlib import Path

import numpy as np
import numpy.typing as npt

from synthetic_gathers import waveform_store
from synthetic_gathers.gathers import RecordedSurvey, SyntheticSurvey, simulate_survey
from synthetic_gathers.model import Layer, LayeredModel
from synthetic_gathers.noise import FieldNoise

FloatArray = npt.NDArray[np.float64]

STORED = Path(__file__).parent / "demo" / "larch_rise.npz"

RECEIVER_X_M = np.arange(0.0, 95.0, 2.0)
SOURCE_X_M = np.array([-31.0, -15.0, -1.0, 15.0, 31.0, 47.0, 63.0, 79.0, 95.0, 109.0, 125.0])
SOURCE_HZ = 60.0
INTERVAL_S = 0.25e-3
DURATION_S = 0.3
DEFAULT_SEED = 20261201
TANK_X_M = (34.0, 66.0)
TANK_FLOOR_DEPTH_M = 5.0


def _surface_z_m(x_m: FloatArray) -> FloatArray:
    """A slope up along the line with a terrace edge, metres above the site datum."""
    return np.asarray(102.0 + 1.4 * np.tanh((x_m - 40.0) / 35.0) + 0.25 * np.sin(x_m / 7.0))


def _rock_z_m(x_m: FloatArray) -> FloatArray:
    """Rockhead: a gentle rise along the line with a filled channel across it."""
    channel = 4.0 * np.exp(-0.5 * ((x_m - 60.0) / 11.0) ** 2)
    return np.asarray(96.6 + 0.4 * np.sin((x_m + 10.0) / 17.0) - channel)


def demo_model() -> LayeredModel:
    """The ground of the demo: gravel over slate, with a filled channel."""
    return LayeredModel(
        surface_z_m=_surface_z_m,
        layers=(
            Layer(vp_m_s=520.0, vs_m_s=260.0, density_kg_m3=1750.0),
            Layer(vp_m_s=2450.0, vs_m_s=1250.0, density_kg_m3=2350.0),
        ),
        interface_z_m=(_rock_z_m,),
        name="Larch Rise",
    )


def simulate_demo(
    source_x_m: npt.ArrayLike = SOURCE_X_M, progress: Callable[[int, int], None] | None = None
) -> SyntheticSurvey:
    """Compute the clean gathers of the demo; minutes for all shots."""
    from synthetic_gathers.wavelets import hammer

    return simulate_survey(
        demo_model(),
        source_x_m,
        RECEIVER_X_M,
        wavelet=hammer(SOURCE_HZ),
        duration_s=DURATION_S,
        interval_s=INTERVAL_S,
        progress=progress,
    )


def save_demo(path: str | os.PathLike[str], survey: SyntheticSurvey) -> None:
    """Store the clean gathers with their geometry and true onsets."""
    waveform_store.save(
        path,
        survey.waveforms,
        interval_s=survey.interval_s,
        source_x_m=survey.source_x_m,
        receiver_x_m=survey.receiver_x_m,
        source_depth_m=survey.source_depth_m,
        onset_s=survey.onset_s,
        source_duration_s=survey.source_duration_s,
    )


def load_demo(path: str | os.PathLike[str] = STORED) -> SyntheticSurvey:
    """The demo survey as shipped: clean gathers, geometry, truth."""
    waveforms, arrays = waveform_store.load(path)
    numbers = {name: np.asarray(array, dtype=np.float64) for name, array in arrays.items()}
    return SyntheticSurvey(
        model=demo_model(),
        waveforms=waveforms,
        interval_s=float(numbers["interval_s"]),
        source_x_m=numbers["source_x_m"],
        receiver_x_m=numbers["receiver_x_m"],
        source_depth_m=numbers["source_depth_m"],
        onset_s=numbers["onset_s"],
        source_duration_s=float(numbers["source_duration_s"]),
    )


def demo_noise() -> FieldNoise:
    """An ordinary working day at Larch Rise: one dead geophone, one weak shot."""
    return dataclasses.replace(FieldNoise.level("field"), dead=1, weak_shots=1)


def write_demo(
    directory: str | os.PathLike[str], seed: int = DEFAULT_SEED, noise: FieldNoise | None = None
) -> RecordedSurvey:
    """Write the demo as the crew hands it over: SEG-Y files, `README.txt`, and the truth in the subfolder `truth`.

    Parameters
    ----------
    directory : path
        Made if it is not there.
    seed : int
        Of the field noise.
    noise : FieldNoise, optional
        `demo_noise()` unless given.

    Returns
    -------
    RecordedSurvey
        What was written, with its truth.
    """
    recorded = load_demo().noisy(seed, demo_noise() if noise is None else noise)
    recorded.write(
        directory,
        description=(
            "LARCH RISE   BURIED WATER TANK   REFRACTION LINE 1   (INVENTED SCENARIO)",
            "SOURCE SLEDGEHAMMER ON PLATE   VERTICAL GEOPHONES 10 HZ AT 2 M",
            "X ALONG THE LINE FROM GEOPHONE 1, Y ACROSS, Z ABOVE THE SITE DATUM",
        ),
    )
    (Path(directory) / "README.txt").write_text(_readme(recorded), encoding="ascii")
    return recorded


def _readme(recorded: RecordedSurvey) -> str:
    """What a crew would write on the cover sheet; the truth stays in its folder."""
    shots = "\n".join(
        f"  shot_{record.record:02d}.sgy   record {record.record:2d}   x = {record.source_xyz[0]:6.1f} m"
        for record in recorded.records
    )
    first = recorded.records[0]
    return f"""LARCH RISE, REFRACTION LINE 1 (an invented scenario)

A farming village wants a drinking-water tank of concrete, 32 m long, buried in a dry gravel slope. Its floor is to
lie {TANK_FLOOR_DEPTH_M:.0f} m below ground, between x = {TANK_X_M[0]:.0f} m and x = {TANK_X_M[1]:.0f} m of the line.
The client asks:
  1. How deep is the rock under the tank, and how sure is that?
  2. Does it lie at one depth, or does a filled channel cross the site? Half on rock, half on fill, the tank cracks.
  3. Can the rock be ripped?

Line: {first.channel.size} vertical geophones (10 Hz) at 2 m, x = {first.receiver_xyz[0, 0]:.0f} to \
{first.receiver_xyz[-1, 0]:.0f} m; elevations levelled and in the trace headers.
Source: sledgehammer on a plate, single blows, on the surface.
Record: {first.interval_s * 1e3:g} ms, {first.samples.shape[1]} samples, first sample {first.start_s * 1e3:g} ms \
relative to the time break (delay recording time).
Files (SEG-Y revision 1, IEEE floats):
{shots}

Observer's notes: a working day, some traffic on the lane and light wind. One geophone gave no signal all day; one blow
was weak. The trigger is a hammer switch: its time break varies by some tenths of a millisecond from blow to blow.

The folder truth holds what no crew has: true_onsets.csv (on each record's clock, time-break error and geophone delay
included and listed), true_depths.csv (vertical, under every geophone) and true_velocities.csv.
Look at it only after having interpreted the line.
"""
