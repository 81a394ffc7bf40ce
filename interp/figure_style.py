"""How every figure looks: sizes for an A4 page, one set of colours, and the same bytes from the same figure."""

from __future__ import annotations

import io
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import wraps
from typing import Any, ParamSpec

import matplotlib
import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from PIL import Image

from picker.units import columns_in

FloatArray = npt.NDArray[np.float64]
P = ParamSpec("P")

PAGE_WIDTH_MM = 180.0  # A4 less its margins
MM_PER_INCH = 25.4
DPI = 170
COLOURS_KEPT = 128  # a figure of lines and tints needs no more, and its file is a third of the size
_NEARLY_WHITE = 250

# Told apart by people with any of the common kinds of colour blindness: the colours differ in lightness as well as hue.
INK = "#23282e"
QUIET = "#8a9099"
FAINT = "#d9dce0"
GROUND = "#6d5430"
REFRACTORS = ("#17508f", "#b3471d", "#5d2f77", "#2b7a5f")
LAYERS = ("#f4ecdd", "#e6ecf3", "#efe3ea", "#e2efe8", "#ececec")
BOUND = "#4b4b4b"
PICK = "#c03a12"
PREDICTED = "#1c62b0"
SHOTS = ("#17508f", "#e08214", "#2b8a74", "#a8307a", "#6aaede", "#8a7a12", "#4d4d4d")

STYLE: Any = {
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans"],  # comes with matplotlib: the same letters on every machine
    "font.size": 7.0,
    "axes.titlesize": 8.0,
    "axes.titlelocation": "left",
    "axes.labelsize": 7.0,
    "axes.edgecolor": QUIET,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.5,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.unicode_minus": True,
    "axes.axisbelow": True,
    "text.color": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.labelsize": 6.5,
    "ytick.labelsize": 6.5,
    "xtick.major.width": 0.5,
    "ytick.major.width": 0.5,
    "xtick.major.size": 2.5,
    "ytick.major.size": 2.5,
    "legend.fontsize": 6.5,
    "legend.frameon": False,
    "legend.handlelength": 1.8,
    "legend.columnspacing": 1.4,
    "lines.linewidth": 0.9,
    "grid.color": FAINT,
    "grid.linewidth": 0.4,
    "hatch.linewidth": 0.4,
    "path.simplify": True,
}


@contextmanager
def _in_style() -> Iterator[None]:
    """The style of all figures, whatever matplotlib is set to outside."""
    with matplotlib.rc_context():
        matplotlib.rcdefaults()
        matplotlib.rcParams.update(STYLE)
        yield


def styled(draw: Callable[P, Figure]) -> Callable[P, Figure]:
    """Let a function draw its figure in the style of all figures."""

    @wraps(draw)
    def in_style(*args: P.args, **kwargs: P.kwargs) -> Figure:
        with _in_style():
            return draw(*args, **kwargs)

    return in_style


def new_figure(height_mm: float) -> Figure:
    """Give an empty figure of the width of the page."""
    return Figure(figsize=(PAGE_WIDTH_MM / MM_PER_INCH, height_mm / MM_PER_INCH), facecolor="white")


def axes_at(figure: Figure, left_mm: float, bottom_mm: float, width_mm: float, height_mm: float) -> Axes:
    """Add axes at a place given in millimetres from the lower left corner, so that scales are known before drawing."""
    height = figure.get_figheight() * MM_PER_INCH
    return figure.add_axes((left_mm / PAGE_WIDTH_MM, bottom_mm / height, width_mm / PAGE_WIDTH_MM, height_mm / height))


def lengths_in(units: str, metres: npt.ArrayLike) -> FloatArray:
    """Lengths (or velocities per second) given in metres, in the units that are to be read."""
    (values,) = columns_in(units, {"length_m": np.asarray(metres, dtype=np.float64)}).values()
    return np.asarray(values, dtype=np.float64)


def mark(**looks: Any) -> Line2D:
    """Give a sample for a legend."""
    return Line2D([], [], **({"linestyle": "none", "color": INK} | looks))


def png_bytes(figure: Figure, dpi: int = DPI) -> bytes:
    """Give a figure as PNG; the same figure gives the same bytes.

    Parameters
    ----------
    figure : Figure
    dpi : int
        Pixels per inch.

    Returns
    -------
    bytes
        A PNG of at most COLOURS_KEPT colours, with no date and no name of a program in it.
    """
    canvas: Any = FigureCanvasAgg(figure)
    figure.set_dpi(dpi)
    with _in_style():
        canvas.draw()
    picture = Image.fromarray(np.asarray(canvas.buffer_rgba())[:, :, :3].copy())
    few = picture.quantize(COLOURS_KEPT, method=Image.Quantize.FASTOCTREE, dither=Image.Dither.NONE)
    palette = np.array(few.getpalette("RGB"), dtype=np.uint8).reshape(-1, 3)
    palette[(palette >= _NEARLY_WHITE).all(axis=1)] = 255  # paper is white; choosing colours makes it a little grey
    few.putpalette(palette.tobytes(), "RGB")
    stream = io.BytesIO()
    few.save(stream, format="png", dpi=(dpi, dpi), compress_level=6)
    return stream.getvalue()
