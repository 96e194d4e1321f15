"""The frozen look of every figure, and the ways out of a figure: PNG, PDF and SVG text.

Everything that is drawn goes through `styled`, so that no setting of the user's matplotlib changes a figure;
other modules take what they need of matplotlib from here. Places on a figure are in millimetres of the page.
"""

from __future__ import annotations

import os
import re
from collections.abc import Callable, Mapping
from functools import wraps
from hashlib import sha256
from io import StringIO
from pathlib import Path
from typing import Any, ParamSpec, TypeVar

import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.cm import ScalarMappable
from matplotlib.colors import ListedColormap, LogNorm, Normalize
from matplotlib.container import ErrorbarContainer
from matplotlib.figure import Figure
from matplotlib.legend_handler import HandlerTuple
from matplotlib.lines import Line2D
from matplotlib.markers import TICKDOWN, TICKRIGHT, TICKUP
from matplotlib.patches import Patch
from matplotlib.path import Path as Outline
from matplotlib.ticker import FixedFormatter, FixedLocator, MaxNLocator, NullLocator
from numpy.typing import ArrayLike, NDArray

__all__ = [
    "LOWER_LIMIT",
    "ONE_COLUMN_MM",
    "PART_LOOK",
    "SERIES_LOOK",
    "TICKDOWN",
    "TICKRIGHT",
    "TICKUP",
    "TWO_COLUMNS_MM",
    "UPPER_LIMIT",
    "Axes",
    "ErrorbarContainer",
    "Figure",
    "FixedFormatter",
    "FixedLocator",
    "Line2D",
    "LogNorm",
    "MaxNLocator",
    "Normalize",
    "NullLocator",
    "Patch",
    "ScalarMappable",
    "figure_svg",
    "label_axes",
    "legend_below",
    "new_figure",
    "place",
    "plane_map",
    "save_figure",
    "set_height",
    "size_mm",
    "styled",
    "temperature_colours",
    "temperature_map",
]

FloatArray = NDArray[np.float64]
Arguments = ParamSpec("Arguments")
Result = TypeVar("Result")

ONE_COLUMN_MM = 86.0
"""Width of a figure in one column of print."""

TWO_COLUMNS_MM = 178.0
"""Width of a figure across two columns of print."""

LEFT_MM, RIGHT_MM = 13.0, 3.0
MM_PER_INCH = 25.4
PNG_DPI = 220
OPTIONS: dict[str, dict[str, Any]] = {"png": {"pil_kwargs": {"compress_level": 4}}, "pdf": {}}

BLACK, GREY, BLUE = "#000000", "#767676", "#0b5fa5"
BAND_95, BAND_68 = "#d3e3f1", "#9dc1e0"
LINEAR_GREY = "#f3f3f3"

PART_LOOK: dict[str, dict[str, Any]] = {
    "activation": {"color": "#b34700", "linestyle": (0, (5, 1.6))},
    "hopping": {"color": "#00785a", "linestyle": (0, (1, 1.2))},
    "nearest": {"color": "#8a3d7a", "linestyle": (0, (4, 1.2, 1, 1.2))},
    "constant": {"color": "#4d4d4d", "linestyle": (0, (7, 1.5, 1, 1.5, 1, 1.5))},
}
"""Colour and line style of each contribution to a curve."""

_COLOURS = ("#0b5fa5", "#b34700", "#00785a", "#8a3d7a", "#000000", "#c08a00", "#4a90c2", "#767676")
SERIES_LOOK: tuple[dict[str, Any], ...] = tuple(
    {"marker": marker, "color": colour, "linestyle": line, "linewidth": 0.7, "markerfacecolor": "white"}
    for marker, colour, line in zip(
        "os^DvP<>XhdpH*8o",
        _COLOURS * 2,
        ("-", (0, (5, 1.5)), (0, (1, 1.2)), (0, (4, 1.2, 1, 1.2))) * 4,
        strict=True,
    )
)
"""Marker, colour and line style of several series in one panel."""

_ARROW = np.array([(-0.4, 0.0), (0.4, 0.0), (0.0, 0.0), (0.0, 1.0), (-0.25, 0.65), (0.0, 1.0), (0.25, 0.65)])
_MOVE, _LINE = Outline.MOVETO, Outline.LINETO
_STROKES = [_MOVE, _LINE, _MOVE, _LINE, _MOVE, _LINE, _LINE]
LOWER_LIMIT: dict[str, Any] = {
    "marker": Outline(_ARROW, _STROKES), "markerfacecolor": "none", "markersize": 12.0,
}  # fmt: skip
"""Arrow from a limit to where the gap may be; that of an upper limit points down."""

UPPER_LIMIT = LOWER_LIMIT | {"marker": Outline(_ARROW * [1.0, -1.0], _STROKES)}

_OWN = {
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans"],
    "font.size": 7.0,
    "axes.labelsize": 8.0,
    "axes.titlesize": 8.0,
    "axes.titlelocation": "left",
    "axes.linewidth": 0.6,
    "axes.labelpad": 2.5,
    "axes.unicode_minus": True,
    "axes.formatter.use_mathtext": False,
    "xtick.labelsize": 7.0,
    "ytick.labelsize": 7.0,
    "xtick.direction": "in",
    "ytick.direction": "in",
    "xtick.major.size": 2.6,
    "ytick.major.size": 2.6,
    "xtick.minor.size": 1.4,
    "ytick.minor.size": 1.4,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "xtick.minor.width": 0.4,
    "ytick.minor.width": 0.4,
    "xtick.major.pad": 2.2,
    "ytick.major.pad": 2.2,
    "lines.linewidth": 1.0,
    "lines.markersize": 3.4,
    "lines.markeredgewidth": 0.7,
    "patch.linewidth": 0.6,
    "hatch.linewidth": 0.4,
    "legend.fontsize": 7.0,
    "legend.frameon": False,
    "legend.borderpad": 0.0,
    "legend.borderaxespad": 0.0,
    "legend.handlelength": 2.1,
    "legend.handletextpad": 0.5,
    "legend.labelspacing": 0.3,
    "legend.columnspacing": 0.9,
    "legend.numpoints": 1,
    "mathtext.fontset": "dejavusans",
    "path.simplify": True,
    "path.simplify_threshold": 0.2,
    "figure.dpi": 100.0,
    "figure.constrained_layout.use": False,
    "figure.autolayout": False,
    "savefig.bbox": None,
    "pdf.fonttype": 3,
    "pdf.compression": 6,
    "svg.fonttype": "path",
    "svg.hashsalt": "gapfit",
    "svg.id": None,
}
_STYLE: dict[Any, Any] = {
    key: value for key, value in matplotlib.rcParamsDefault.items() if not key.startswith("backend")
} | {key: value for key, value in _OWN.items() if key in matplotlib.rcParamsDefault}


def styled(draw: Callable[Arguments, Result]) -> Callable[Arguments, Result]:
    """Let a function draw with the frozen look, whatever the user's settings are."""

    @wraps(draw)
    def drawn(*args: Arguments.args, **kwargs: Arguments.kwargs) -> Result:
        with matplotlib.rc_context(_STYLE):
            return draw(*args, **kwargs)

    return drawn


# ------------------------------------------------------------------------------------------------ the page


def new_figure(width_mm: float, height_mm: float) -> Figure:
    """Empty figure of a size on paper.

    Parameters
    ----------
    width_mm, height_mm : float, mm

    Returns
    -------
    Figure
    """
    figure = Figure(figsize=(width_mm / MM_PER_INCH, height_mm / MM_PER_INCH), facecolor="white")
    FigureCanvasAgg(figure)
    return figure


def size_mm(figure: Figure) -> tuple[float, float]:
    """Width and height of a figure on paper, mm."""
    width, height = figure.get_size_inches() * MM_PER_INCH
    return float(width), float(height)


def place(axes: Axes, left: float, bottom: float, width: float, height: float) -> Axes:
    """Put axes somewhere on the page.

    Parameters
    ----------
    axes : Axes
    left, bottom, width, height : float, mm
        From the lower left corner of the figure.

    Returns
    -------
    Axes
        The same axes.
    """
    across, up = size_mm(axes.figure)  # type: ignore[arg-type]
    axes.set_position((left / across, bottom / up, width / across, height / up))
    return axes


def legend_below(
    figure: Figure, entries: Mapping[str, Any], title: str = "", columns: int = 2, left_mm: float = 3.0
) -> float:
    """Legend at the foot of a figure, where it cannot cover data; the figure is cut to its height.

    Parameters
    ----------
    figure : Figure
    entries : mapping of str to artist
        Handles by label.
    title : str
        Line above, may be empty.
    columns : int
    left_mm : float, mm
        Margin on the left.

    Returns
    -------
    float, mm
        Height that the legend takes up, its margin included.
    """
    if not entries:
        return 1.0
    width = size_mm(figure)[0]
    legend = figure.legend(
        list(entries.values()),
        list(entries),
        ncols=columns,
        loc="lower left",
        bbox_to_anchor=(left_mm / width, 0.0),
        title=title or None,
        title_fontsize=7.0,
        alignment="left",
        handler_map={tuple: HandlerTuple(ndivide=None, pad=0.0)},
    )
    box = legend.get_window_extent(figure.canvas.get_renderer())  # type: ignore[attr-defined]
    if columns > 1 and box.width / figure.dpi * MM_PER_INCH > width - left_mm - 0.5:
        legend.remove()
        return legend_below(figure, entries, title, columns - 1, left_mm)
    return float(box.height / figure.dpi * MM_PER_INCH) + 1.2


def set_height(figure: Figure, height_mm: float) -> None:
    """Change the height of a figure; what stands in fractions of the figure moves along."""
    figure.set_size_inches(size_mm(figure)[0] / MM_PER_INCH, height_mm / MM_PER_INCH)


def label_axes(axes: Axes, x: str | None, y: str | None, x_mm: float = 4.0, y_mm: float = 9.5) -> None:
    """Labels of axes at fixed distances from them.

    Parameters
    ----------
    axes : Axes
        Already placed.
    x, y : str or None
        Labels with units.
    x_mm, y_mm : float, mm
        Distance of the label's near edge below and of its middle left of the axes.
    """
    across, up = size_mm(axes.figure)  # type: ignore[arg-type]
    box = axes.get_position()
    if x is not None:
        axes.set_xlabel(x)
        axes.xaxis.set_label_coords(0.5, -x_mm / (box.height * up))
    if y is not None:
        axes.set_ylabel(y, va="center")
        axes.yaxis.set_label_coords(-y_mm / (box.width * across), 0.5)


# ------------------------------------------------------------------------------------------------- colours


def temperature_map() -> ListedColormap:
    """Ramp of temperature: dark blue when cold, orange when warm, of monotone lightness, seen on white."""
    return ListedColormap(matplotlib.colormaps["plasma"](np.linspace(0.0, 0.83, 256)), name="temperature")


def temperature_colours(temperature: ArrayLike) -> FloatArray:
    """Colours of temperatures, by their logarithm.

    Parameters
    ----------
    temperature : array_like[n_temperature], K

    Returns
    -------
    ndarray[n_temperature, 4]
        RGBA.
    """
    height = np.log(np.asarray(temperature, float))
    span = np.ptp(height)
    return np.asarray(temperature_map()((height - height.min()) / span if span > 0 else 0 * height))


def plane_map(name: str) -> Any:
    """Colour map of a quantity over a plane: ``"gap"`` or ``"weight"``, both of monotone lightness."""
    return matplotlib.colormaps[{"gap": "cividis", "weight": "YlGnBu"}[name]]


# ------------------------------------------------------------------------------------------------- ways out


@styled
def save_figure(figure: Figure, folder: str | Path, name: str) -> tuple[Path, Path]:
    """Write a figure as PNG and as PDF, each under a temporary name first.

    Parameters
    ----------
    figure : Figure
    folder : str or Path
        Made if it does not exist.
    name : str
        File name without suffix.

    Returns
    -------
    tuple of Path
        The PNG and the PDF. Their bytes depend on the figure only.
    """
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    metadata: dict[str, dict[str, Any]] = {
        "png": {"Software": "gapfit"},
        "pdf": {"Creator": "gapfit", "Producer": None, "CreationDate": None},
    }
    paths = []
    for kind, record in metadata.items():
        path, draft = folder / f"{name}.{kind}", folder / f".{name}.{os.getpid()}.{kind}"
        try:
            figure.savefig(draft, format=kind, dpi=PNG_DPI, metadata=record, **OPTIONS[kind])
            os.replace(draft, path)
        finally:
            draft.unlink(missing_ok=True)
        paths.append(path)
    return paths[0], paths[1]


@styled
def figure_svg(figure: Figure) -> str:
    """SVG element of a figure, to stand in an HTML page beside others.

    Parameters
    ----------
    figure : Figure

    Returns
    -------
    str
        One ``<svg>`` element, letters as paths, coordinates to a hundredth of a point, without date; every id
        carries a prefix made from the content, so that figures on one page do not meddle with each other.
    """
    stream = StringIO()
    nothing = {"Date": None, "Creator": None, "Format": None, "Type": None}
    figure.savefig(stream, format="svg", metadata=nothing)
    return _slim(stream.getvalue())


def _slim(svg: str) -> str:
    body = svg[svg.index("<svg") :]
    body = re.sub(r"\s*<metadata>.*?</metadata>|\s*<!--.*?-->|\s*<style.*?</style>", "", body, flags=re.S)
    body = re.sub(r' (d|x|y)="([^"]*)"', lambda found: f' {found[1]}="{_rounded(found[2])}"', body)
    used = set(re.findall(r'(?:href="#|url\(#)([^")]+)', body))
    prefix = "g" + sha256(body.encode()).hexdigest()[:8]
    short = {name: f"{prefix}-{index}" for index, name in enumerate(sorted(used))}
    renamed = {name: f' id="{new}"' for name, new in short.items()}
    body = re.sub(r' id="([^"]*)"', lambda found: renamed.get(found[1], ""), body)
    body = re.sub(r'(href="#|url\(#)([^")]+)', lambda found: found[1] + short[found[2]], body)
    body = re.sub(r">\s+<", ">\n<", body)
    look = 'style="stroke-linejoin:round;stroke-linecap:butt" role="img" '
    return body.replace("<svg ", f"<svg {look}", 1).strip() + "\n"


def _rounded(path: str) -> str:
    text = re.sub(r"-?\d+\.\d+", lambda found: f"{float(found[0]):.2f}".rstrip("0").rstrip("."), path)
    return " ".join(text.split())
