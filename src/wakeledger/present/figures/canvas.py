"""How every figure looks and how it becomes bytes: one style, reproducible files."""

from __future__ import annotations

import io
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from matplotlib.figure import Figure

#: Formats a figure can be written in.
FORMATS = ("pdf", "png", "svg")

#: Resolution of rasterized maps and of PNG files, dots per inch.
RESOLUTION = 150

#: Width of a figure, inches; fits A4 between margins of 15 mm.
WIDTH = 7.1

#: Colours told apart with every common colour-vision deficiency (Okabe and Ito 2008).
INK = "#1f2a36"
BLUE = "#0072b2"
VERMILION = "#d55e00"
GREEN = "#009e73"
PURPLE = "#cc79a7"
GREY = "#8a939c"

_STYLE: dict[str, Any] = {
    "font.size": 8.5,
    "font.family": "DejaVu Sans",
    "axes.titlesize": 9.5,
    "axes.titlelocation": "left",
    "axes.labelsize": 8.5,
    "axes.edgecolor": GREY,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.7,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "text.color": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.labelsize": 8,
    "ytick.labelsize": 8,
    "legend.frameon": False,
    "legend.fontsize": 8,
    "lines.linewidth": 1.4,
    "hatch.linewidth": 0.5,
    # Names of sources and balances come from the user and are not formulas.
    "text.parse_math": False,
    "svg.hashsalt": "wakeledger",
    "svg.fonttype": "path",
    "pdf.compression": 9,
}


@contextmanager
def style() -> Iterator[None]:
    """The look of the figures, for the time of drawing or writing one."""
    import matplotlib as mpl

    with mpl.rc_context():
        mpl.rcdefaults()
        parameters: Any = mpl.rcParams
        parameters.update(_STYLE)
        yield


def figure_bytes(figure: Figure, kind: str) -> bytes:
    """A figure as the bytes of a file, the same for the same figure.

    Parameters
    ----------
    figure : Figure
        The figure.
    kind : {"pdf", "png", "svg"}
        Format.

    Returns
    -------
    bytes

    Raises
    ------
    ValueError
        If the format is not one of `FORMATS`.
    """
    if kind not in FORMATS:
        raise ValueError(f"figures cannot be written as {kind!r}; allowed: {', '.join(FORMATS)}")
    fixed: dict[str, dict[str, Any]] = {
        "pdf": {"CreationDate": None, "Creator": "wakeledger", "Producer": None},
        "png": {"Software": None},
        "svg": {"Date": None, "Creator": None},
    }
    stream = io.BytesIO()
    with style(), warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="Glyph .* missing from font")
        figure.savefig(stream, format=kind, dpi=RESOLUTION, metadata=fixed[kind])
    return stream.getvalue()
