"""What all figures share: colours, type, and how a figure becomes part of the page."""

from __future__ import annotations

import base64
import io
import re
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import matplotlib as mpl
import numpy as np
import numpy.typing as npt
from matplotlib.colors import LinearSegmentedColormap

from geoclust.errors import OutputError, not_allowed
from geoclust.layers.results_folder import results_folder
from geoclust.layers.styles import RAMP

if TYPE_CHECKING:
    from matplotlib.figure import Figure

Floats = npt.NDArray[np.float64]

# the colours of the styles that go with the layers, so that page and map look alike
INK = "#22303c"
CLUSTER = "#2d6373"
UNSURE = "#c9a227"
BACKGROUND = "#8d8d8d"
# light fills that stay apart from the lines above in a grey print
BAND = "#d9d6c6"
PAPER = "#fbfaf4"
WATER = "#e3eaee"

FIGURE_SUFFIXES = (".svg", ".png", ".pdf")
# above these, what is drawn goes into the figure as pixels: a page has to stay small
DENSE_POINTS = 5_000
DENSE_VERTICES = 20_000
_PIXELS_PER_INCH = 200

RAMP_COLOURS = LinearSegmentedColormap.from_list("geoclust", RAMP)

_LOOK: Any = {
    "font.family": "sans-serif",
    "font.size": 10,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.8,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "text.color": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.labelsize": 9,
    "ytick.labelsize": 9,
    "legend.frameon": False,
    "legend.fontsize": 9,
    "axes.unicode_minus": True,
    # names of zones are no formulas, whatever signs they hold
    "text.parse_math": False,
    # text stays text: small files, and the type of the reader's machine
    "svg.fonttype": "none",
    # the same results give the same file
    "svg.hashsalt": "geoclust",
}


@contextmanager
def look() -> Iterator[None]:
    """Draw inside this block: the look is set for it alone."""
    with mpl.rc_context(_LOOK):
        yield


def svg_text(figure: Figure) -> str:
    """The figure as SVG; the same figure gives the same text."""
    buffer = io.StringIO()
    with look():
        figure.savefig(buffer, format="svg", dpi=_PIXELS_PER_INCH, metadata={"Date": None, "Creator": None})
    text = buffer.getvalue()
    return _NUMBERS.sub(_shorter, text[text.index("<svg") :])


# coordinates of lines and marks, written to a millionth of a point
_NUMBERS = re.compile(r' (?:d|x|y)="[^"]*"')


def _shorter(attribute: re.Match[str]) -> str:
    """Coordinates to a hundredth of a point: nobody sees more, and the page stays small."""
    return re.sub(r"-?\d+\.\d{3,}", lambda n: f"{float(n[0]):.2f}".rstrip("0").rstrip("."), attribute[0])


def data_uri(figure: Figure) -> str:
    """The figure as an address that holds all of it, so that no file has to be fetched."""
    encoded = base64.b64encode(svg_text(figure).encode("utf-8")).decode("ascii")
    return f"data:image/svg+xml;base64,{encoded}"


def save_figures(figures: Mapping[str, Figure], folder: str | Path, overwrite: bool = False) -> None:
    """Write figures into a folder of their own, which appears whole.

    Parameters
    ----------
    figures
        Figure by file name; the suffix says which format.
    folder
        Folder to make.
    overwrite
        Whether such figures that it holds already may be replaced.

    Raises
    ------
    UsageError
        If a suffix is none of .svg, .png, .pdf.
    OutputError
        If the folder holds other files or cannot be written.
    """
    for name in figures:
        if Path(name).suffix not in FIGURE_SUFFIXES:
            raise not_allowed("the suffix of a figure", FIGURE_SUFFIXES, name)
    with results_folder(folder, overwrite, known_files=tuple(figures)) as partial:
        for name, figure in figures.items():
            try:
                if Path(name).suffix == ".svg":
                    (partial / name).write_text(svg_text(figure), encoding="utf-8")
                else:
                    with look():
                        figure.savefig(partial / name, dpi=_PIXELS_PER_INCH)
            except OSError as error:
                raise OutputError(f"{folder}/{name} cannot be written: {error.strerror}.") from error


def ramp_places(values: npt.ArrayLike, breaks: Floats) -> Floats:
    """Place along the ramp, 0 to 1, of values whose class breaks are spread evenly along it.

    The style of the raster does the same: colours on the page are those in the GIS.
    Values that are not numbers stay so.
    """
    numbers = np.asarray(values, dtype=float)
    if len(breaks) == 1:
        places = np.where(numbers > 0, 1.0, 0.0)
    else:
        places = np.interp(numbers, breaks, np.linspace(0.0, 1.0, len(breaks)))
    return np.where(np.isfinite(numbers), places, np.nan)
