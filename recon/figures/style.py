"""The one visual language of all figures: sizes, colours, scale bars, and writing to file.

Figures are as wide as a journal page and stay legible at half that width. Amounts are drawn with
`AMOUNTS`, signed errors with `ERRORS` (symmetric about zero), lines in the order of `LINES`. All
three can be told apart with any colour vision: cividis (Nuñez, Anderton & Renslow, PLoS ONE
13:e0199239, 2018), a blue–orange map of linear lightness, and the palette of Okabe & Ito (2008).
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import matplotlib
import numpy as np
from matplotlib import patheffects
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import Colormap, ListedColormap
from matplotlib.figure import Figure
from numpy.typing import NDArray

from recon.errors import InputError
from recon.files import atomic_path
from recon.grid import Grid

FloatArray = NDArray[np.floating]

PAGE_WIDTH = 7.1
"""Inches: the width of a two-column page."""

PANEL_LIMIT = 2.2
"""Inches: the widest single map."""

DOTS_PER_INCH = 300
ENDINGS = (".png", ".pdf", ".svg")

INK = "#202020"
FAINT = "#8a8a8a"
MISSING = "#bdbdbd"
TRUTH = "#202020"
LINES = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#56B4E9", "#E69F00")
DASHES: tuple[Any, ...] = ("-", (0, (5, 1.6)), (0, (1.2, 1.2)), (0, (6, 1.5, 1.2, 1.5)))
MARKERS = ("o", "s", "^", "D")

SETTINGS: Any = {
    "font.family": "DejaVu Sans",
    "mathtext.fontset": "dejavusans",
    "font.size": 10,
    "axes.titlesize": 10,
    "axes.labelsize": 10,
    "xtick.labelsize": 9.5,
    "ytick.labelsize": 9.5,
    "legend.fontsize": 9.5,
    "legend.frameon": False,
    "axes.linewidth": 0.8,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "text.color": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.direction": "out",
    "ytick.direction": "out",
    "axes.spines.top": False,
    "axes.spines.right": False,
    "lines.linewidth": 1.6,
    "axes.formatter.use_mathtext": True,
    "pdf.fonttype": 42,
    "svg.fonttype": "none",
    "svg.hashsalt": "nearspin",
}


@contextmanager
def applied() -> Iterator[None]:
    """Draw inside this block with the settings above."""
    with matplotlib.rc_context(SETTINGS):
        yield


def new_figure(width: float, height: float) -> Figure:
    """An empty figure of a size in inches, bound to no window and to no global state."""
    figure = Figure(figsize=(width, height), layout="constrained")
    FigureCanvasAgg(figure)
    figure.get_layout_engine().set(w_pad=0.04, h_pad=0.06, wspace=0.02, hspace=0.02)  # type: ignore[union-attr, call-arg]
    return figure


def save(figure: Figure, path: Path | str) -> Path:
    """Write a figure as PNG (300 dots per inch), PDF or SVG; nothing half-written is ever found.

    The same figure gives the same bytes: no date is written.

    Raises
    ------
    InputError
        Another ending, or a folder that cannot be written.
    """
    path = Path(path)
    if path.suffix not in ENDINGS:
        raise InputError(f"figures end in {', '.join(ENDINGS)}", str(path))
    dated = {".png": {"Software": None}, ".pdf": {"CreationDate": None}, ".svg": {"Date": None}}
    with atomic_path(path) as temporary, applied():
        figure.savefig(
            temporary, dpi=DOTS_PER_INCH, format=path.suffix[1:], metadata=dated[path.suffix]
        )
    return path


def diverging(
    low_hue: float = 255.0, high_hue: float = 52.0, lightness: float = 34.0, chroma: float = 52.0
) -> Colormap:
    """A two-sided map whose lightness and chroma run straight from the ends to a near white.

    Hues in degrees, lightness and chroma in CIE L*a*b* (CIE 15:2004, illuminant D65).
    """
    side = np.linspace(1, 0, 128, endpoint=False)
    share = np.concatenate([side, [0.0], side[::-1]])
    hue = np.radians(np.where(np.arange(share.size) < side.size, low_hue, high_hue))
    light = 96 + (lightness - 96) * share
    lab = np.stack([light, chroma * share * np.cos(hue), chroma * share * np.sin(hue)], axis=-1)
    return ListedColormap(lab_to_srgb(lab), name="recon_errors").with_extremes(bad=MISSING)


def lab_to_srgb(lab: FloatArray) -> FloatArray:
    """CIE L*a*b* (..., 3), D65, to sRGB in 0..1 (IEC 61966-2-1), clipped to what it can show."""
    middle = (lab[..., 0] + 16) / 116
    parts = np.stack([middle + lab[..., 1] / 500, middle, middle - lab[..., 2] / 200], axis=-1)
    linear = np.where(parts > 6 / 29, parts**3, 3 * (6 / 29) ** 2 * (parts - 4 / 29))
    xyz = linear * np.array([0.95047, 1.0, 1.08883])
    matrix = np.array(
        [[3.2406, -1.5372, -0.4986], [-0.9689, 1.8758, 0.0415], [0.0557, -0.2040, 1.0570]]
    )
    light = np.clip(xyz @ matrix.T, 0, 1)
    coded = np.where(light <= 0.0031308, 12.92 * light, 1.055 * light ** (1 / 2.4) - 0.055)
    return np.asarray(np.clip(coded, 0, 1))


def _amounts() -> Colormap:
    return matplotlib.colormaps["cividis"].with_extremes(bad=MISSING)


AMOUNTS = _amounts()
ERRORS = diverging()


def depth_colours(count: int) -> list[tuple[float, float, float, float]]:
    """One colour per depth, dark near the diamond and light far from it."""
    return [tuple(colour) for colour in AMOUNTS(np.linspace(0.0, 0.88, max(count, 1)))]


def extent_um(grid: Grid) -> tuple[float, float, float, float]:
    """Outer edges (left, right, bottom, top) of a map in µm, for `imshow` with y upwards."""
    (_, ny, nx), (_, dy, dx) = grid.shape, grid.voxel
    return (-0.5e6 * dx, (nx - 0.5) * 1e6 * dx, -0.5e6 * dy, (ny - 0.5) * 1e6 * dy)


def micrometres(length: float) -> str:
    """A length in metres as text in µm, three digits at most."""
    return f"{length * 1e6:.3g} µm"


def round_length(most: float) -> float:
    """The largest of 1, 2, 5 times a power of ten that is not above `most`."""
    power = 10.0 ** np.floor(np.log10(most))
    return float(power * max(digit for digit in (1, 2, 5) if digit * power <= most * 1.0001))


def scale_bar(axes: Axes, label: bool = True) -> None:
    """A bar of a round length in µm in the lower left corner of a map drawn in µm."""
    left, right = sorted(axes.get_xlim())
    bottom, top = sorted(axes.get_ylim())
    width, height = right - left, top - bottom
    length = round_length(0.34 * width)
    start, base = left + 0.06 * width, bottom + 0.07 * height
    outline = [patheffects.withStroke(linewidth=3.4, foreground="black")]
    axes.plot(
        [start, start + length],
        [base, base],
        color="white",
        linewidth=2.2,
        solid_capstyle="butt",
        path_effects=outline,
    )
    if label:
        axes.text(
            start,
            base + 0.03 * height,
            f"{length:g} µm",
            color="white",
            ha="left",
            va="bottom",
            fontsize=9,
            path_effects=[patheffects.withStroke(linewidth=2.0, foreground="black")],
        )
    axes.set_xlim(left, right)
    axes.set_ylim(bottom, top)
