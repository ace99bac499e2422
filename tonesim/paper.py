"""Paper for pictures: settings, looks of lines, axes with units, captions, and files.

Readable in print, in black and white, and without telling colours apart: every line has its own
style, and its own marker where it is made of points. The one door to matplotlib; its settings
are process-wide, so one picture at a time.
"""

import math
import re
import textwrap
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from io import BytesIO
from pathlib import Path
from typing import Any, Literal, NamedTuple

import matplotlib
import numpy as np
import numpy.typing as npt
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.axes._secondary_axes import SecondaryAxis
from matplotlib.axis import Axis
from matplotlib.figure import Figure
from matplotlib.layout_engine import ConstrainedLayoutEngine
from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

from tonesim import __version__
from tonesim.errors import OutputError, UsageError
from tonesim.signals import Signal
from tonesim.units import format_quantity
from tonesim.wav import write_bytes_aside

__all__ = ["Axes", "Figure"]  # for those who draw


class Look(NamedTuple):
    """How a line is told from others: by its style and marker first, then by its colour."""

    color: str
    line: str | tuple[float, tuple[float, ...]]
    marker: str
    size: float = 4.5  # of the marker, points


# Dark on white; where lines coincide a smaller marker lies on a larger one. Invented here.
LOOKS = (
    Look("#14171c", "solid", "o", 6.5),
    Look("#a8400f", (0.0, (6.0, 2.0)), "s"),
    Look("#235a9c", (0.0, (1.5, 1.3)), "^"),
    Look("#5b6b1f", (0.0, (7.0, 2.0, 1.5, 2.0)), "D"),
)
SHADE = "#d9dde2"  # of areas, behind lines
GRID = "#c9ced4"
FORMATS = ("svg", "png")
CREATOR = f"tonesim {__version__}"
WIDTH_IN = 6.7  # text width of an A4 page
SMALLEST_PT = 9.0
_CAPTION_LETTERS, _LEGEND_LETTERS = 95, 84  # that a line holds
_TITLE_PT, _LINE_PT, _LEGEND_PT, _EDGE_PT = 11.0, 11.5, 15.0, 5.0
_POINTS = 72.0  # an inch
_SPACE_BEFORE_UNIT = re.compile(
    r"(?<=[0-9]) (?=[%°]|[pnµmkM]?(?:V|A|W|Hz|Ω|s|dB)(?![A-Za-z]))"
)  # where no line may end
_PREFIXES = {"p": -12, "n": -9, "µ": -6, "m": -3, "": 0, "k": 3, "M": 6}
_MANY_DECADES = 2.5  # more are told by their powers of ten alone
_DPI = 180
_HEAD_BYTES = 4096
_OURS = re.compile(rb"tonesim [0-9]+\.[0-9]+")  # stands in every picture's head
_STYLE: dict[Any, Any] = {
    "font.family": "DejaVu Sans",
    "font.size": SMALLEST_PT,
    "axes.titlesize": 9.5,
    "axes.labelsize": SMALLEST_PT,
    "legend.fontsize": SMALLEST_PT,
    "xtick.labelsize": SMALLEST_PT,
    "ytick.labelsize": SMALLEST_PT,
    "axes.grid": True,
    "grid.color": GRID,
    "grid.linewidth": 0.6,
    "axes.axisbelow": True,
    "axes.linewidth": 0.8,
    "lines.linewidth": 1.4,
    "legend.frameon": False,
    "legend.handlelength": 3.6,
    "text.parse_math": False,  # a title may hold dollar signs
    "svg.fonttype": "none",
    "svg.hashsalt": "tonesim",
    "savefig.dpi": _DPI,
}


@contextmanager
def on_paper() -> Iterator[None]:
    """Use our settings for what is drawn inside, whatever the process has set."""
    with matplotlib.rc_context(), warnings.catch_warnings():
        # A title may hold letters the font lacks; the picture is no worse for it elsewhere.
        warnings.filterwarnings("ignore", message="Glyph .* missing from")
        matplotlib.rcdefaults()
        matplotlib.rcParams.update(_STYLE)
        yield


def looks(count: int) -> tuple[Look, ...]:
    """Looks of so many lines, each unlike the others.

    Raises
    ------
    UsageError
        If there are more lines than looks.
    """
    if count > len(LOOKS):
        raise UsageError(f"{count} lines in one picture, expected {len(LOOKS)} at most")
    return LOOKS[:count]


# ---- sheet of paper, axes ----


def new_figure(
    title: str, height_in: float, rows: int = 1, columns: int = 1
) -> tuple[Figure, list[Axes]]:
    """Return a figure with its title and its axes, row by row."""
    figure = Figure(figsize=(WIDTH_IN, height_in), layout="constrained")
    figure.text(
        _EDGE_PT / WIDTH_IN / _POINTS,
        1.0 - _EDGE_PT / height_in / _POINTS,
        title,
        size=_TITLE_PT,
        weight="bold",
        va="top",
    )
    return figure, list(figure.subplots(rows, columns, squeeze=False).flat)


def finish(figure: Figure, design: str, fixed: str) -> Figure:
    """Add the caption below and one legend for all axes above, both outside of them.

    Parameters
    ----------
    figure : Figure
    design : str
        Title of the design.
    fixed : str
        What was held fixed, in sentences.
    """
    title = "".join(letter if letter.isprintable() else " " for letter in design)
    caption = _SPACE_BEFORE_UNIT.sub("\u00a0", f"{title}. {fixed}")
    caption = textwrap.fill(caption, _CAPTION_LETTERS, break_on_hyphens=False)
    width, height = (_POINTS * inches for inches in figure.get_size_inches())
    figure.text(_EDGE_PT / width, _EDGE_PT / height, caption, size=SMALLEST_PT, va="bottom")
    below = _EDGE_PT + _LINE_PT * (caption.count("\n") + 1.5)
    above = _EDGE_PT + 1.6 * _TITLE_PT
    found: dict[str, Artist] = {}
    for axes in figure.axes:
        for handle, label in zip(*axes.get_legend_handles_labels(), strict=True):
            found.setdefault(textwrap.fill(label, _LEGEND_LETTERS), handle)
    if found:
        columns = 1 if max(map(len, found)) > _LEGEND_LETTERS // 2 or len(found) == 1 else 2
        legend = figure.legend(
            list(found.values()),
            list(found),
            loc="upper left",
            bbox_to_anchor=(0.0, 1.0 - above / height),
            borderaxespad=0.0,
            ncols=columns,
        )
        legend.set_in_layout(False)
        lines = sum(label.count("\n") + 1 for label in found)
        above += _LEGEND_PT * -(-lines // columns) + 0.5 * _EDGE_PT
    engine = figure.get_layout_engine()
    if isinstance(engine, ConstrainedLayoutEngine):
        engine.set(rect=(0.0, below / height, 1.0, 1.0 - (below + above) / height))
        engine.execute(figure)
        figure.set_layout_engine("none")  # once for both files
    return figure


def minus(text: str) -> str:
    """Set true minus signs."""
    return text.replace("-", "−")


def plain(value: float, digits: int = 3) -> str:
    """Write a number with so many significant digits and without exponent."""
    return minus(np.format_float_positional(value, precision=digits, fractional=False, trim="-"))


def quantity(value: float, unit: str, digits: int = 3) -> str:
    """Write a quantity in engineering units."""
    return minus(format_quantity(value, unit, digits))


def level(level_db: float) -> str:
    """Write a level in decibels."""
    return minus(f"{level_db:g} dB")


def linear(axis: Axis, what: str, unit: str, most: float) -> None:
    """Label an axis in the engineering unit that suits its largest value; data stay in SI."""
    _, _, prefixed = format_quantity(abs(most) or 1.0, unit, 1).rpartition(" ")
    scale = 10.0 ** _PREFIXES[prefixed.removesuffix(unit)]
    axis.set_label_text(f"{what} ({prefixed})")
    axis.set_major_formatter(FuncFormatter(lambda value, _: minus(f"{value / scale:.6g}")))


def logarithmic(
    axes: Axes | SecondaryAxis,
    which: Literal["x", "y"],
    what: str,
    unit: str,
    span: tuple[float, float],
) -> None:
    """Scale an axis by its logarithm; every tick carries its unit.

    `span` are the lowest and highest value to be seen.
    """
    if which == "x":
        axes.set_xscale("log")
        axis: Axis = axes.xaxis
    else:
        axes.set_yscale("log")
        axis = axes.yaxis
    subs = (1.0,) if math.log10(span[1] / span[0]) > _MANY_DECADES else (1.0, 2.0, 5.0)
    axis.set_major_locator(LogLocator(subs=subs, numticks=12))
    axis.set_minor_locator(LogLocator(subs=range(2, 10), numticks=99))
    axis.set_minor_formatter(NullFormatter())
    axis.set_major_formatter(FuncFormatter(lambda value, _: _tick(value, unit)))
    axis.set_label_text(f"{what} ({unit})")


def _tick(value: float, unit: str) -> str:
    return f"{plain(value)} %" if unit == "%" else format_quantity(value, unit)


def value_span(*values: Signal) -> tuple[float, float]:
    """Lowest and highest of several lines."""
    return min(float(v.min()) for v in values), max(float(v.max()) for v in values)


def line(
    axes: Axes, x: Signal, y: Signal, look: Look, label: str = "_", *, marked: bool = False
) -> None:
    """Draw a line, with its marker on every point or without; "_" keeps it out of the legend."""
    axes.plot(
        x,
        y,
        color=look.color,
        linestyle=look.line,
        marker=look.marker if marked else "",
        markersize=look.size,
        markerfacecolor="white",
        label=label,
    )


def spikes(axes: Axes, x: Signal, y: Signal, foot: float, look: Look) -> None:
    """Draw the lines of a spectrum from a common foot, as one path."""
    gap = np.full_like(x, np.nan)
    axes.plot(
        np.column_stack([x, x, gap]).ravel(),
        np.column_stack([np.full_like(x, foot), y, gap]).ravel(),
        color=look.color,
        linewidth=0.6,
        label="_",
    )


def mark(axes: Axes, x: Signal, y: Signal, look: Look, label: str, *, filled: bool) -> None:
    """Set markers without a line."""
    face = look.color if filled else "white"
    axes.plot(
        x,
        y,
        color=look.color,
        linestyle="none",
        marker=look.marker,
        markersize=look.size,
        markerfacecolor=face,
        label=label,
    )


def power_scale(axes: Axes, ohm: float) -> None:
    """Add watts in a resistor along the top of an axis of rms volts."""

    def watts(volts: npt.ArrayLike) -> Signal:
        squared: Signal = np.square(np.asarray(volts, dtype=np.float64))
        return squared / ohm

    def volts(watts: npt.ArrayLike) -> Signal:
        root: Signal = np.sqrt(np.maximum(watts, 0.0) * ohm)
        return root

    low, high = axes.get_xlim()
    top = axes.secondary_xaxis("top", functions=(watts, volts))
    logarithmic(top, "x", "output power", "W", (low**2 / ohm, high**2 / ohm))


# ---- files ----


def targets(folder: Path, name: str) -> tuple[Path, ...]:
    """Files a picture of this name is written to."""
    return tuple(folder / f"{name}.{kind}" for kind in FORMATS)


def picture_bytes(figure: Figure, kind: str) -> bytes:
    """Return a figure as a file's contents; the same figure gives the same bytes."""
    metadata = {"svg": {"Creator": CREATOR, "Date": None}, "png": {"Software": CREATOR}}
    into = BytesIO()
    with on_paper():
        figure.savefig(into, format=kind, metadata=metadata[kind])
    return into.getvalue()


def refuse_foreign(path: Path) -> None:
    """Refuse to replace a file that does not say in its head that tonesim drew it.

    Raises
    ------
    OutputError
    """
    try:
        with path.open("rb") as file:
            ours = _OURS.search(file.read(_HEAD_BYTES)) is not None
    except FileNotFoundError:
        return
    except OSError as failure:
        raise OutputError(f"{path} cannot be replaced: {failure.strerror}") from None
    if not ours:
        raise OutputError(
            f"{path} exists and does not say that tonesim drew it; choose another folder"
        )


def save_picture(figure: Figure, folder: Path, name: str) -> tuple[Path, ...]:
    """Write a figure as NAME.svg and NAME.png, each whole or not at all.

    Raises
    ------
    OutputError
        If a file cannot be written, or one of that name is of other origin.
    """
    paths = targets(folder, name)
    for path in paths:
        refuse_foreign(path)
    for path, kind in zip(paths, FORMATS, strict=True):
        write_bytes_aside(path, picture_bytes(figure, kind))
    return paths
