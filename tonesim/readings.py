"""Measured figures of a stage, read from a CSV file whose header tells which kind they are.

Comma or semicolon between columns, a decimal point inside numbers, `#` before remarks. Three
kinds: single figures (``figure,value``), distortion against level (``output_v,thd_percent``),
and static curves (``drive_v,output_v``), which `measured` reads. Levels are rms unless the
column says peak.
"""

import csv
import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Literal, TypeVar

from tonesim.errors import DesignError
from tonesim.measured import MeasuredTable, read_table
from tonesim.record import nearest, read_text, shown, unit_of
from tonesim.units import parse_quantity

TONE_HZ = 1000.0  # where a row names no frequency
LOWEST_HZ, HIGHEST_HZ = 10.0, 20_000.0
MOST_LEVELS = 100  # each costs seconds
_LEAST_THD = 1e-5  # per cent; what is less is a slip of units
_HEADERS = (
    'expected "figure,value", "output_v,thd_percent" (or input_v; frequency_hz as well), '
    '"drive_v,output_v" or "input_v,output_v"'
)

R = TypeVar("R")


@dataclass(frozen=True)
class Known:
    """A figure a file may name: what it is, its unit, and the sign it must have (0: any)."""

    words: str
    unit: str
    sign: int = 1


FIGURES: Mapping[str, Known] = {
    "upper_idle_a": Known("idle current, upper device", "A"),
    "lower_idle_a": Known("idle current, lower device", "A"),
    "draw_positive_a": Known("idle draw, positive rail", "A"),
    "draw_negative_a": Known("idle draw, negative rail", "A"),
    "upper_chain_v": Known("across the upper chain", "V"),
    "lower_chain_v": Known("across the lower chain", "V"),
    "offset_v": Known("output offset", "V", 0),
    "gain": Known("gain at 1 kHz", ""),
    "gain_db": Known("gain at 1 kHz", "dB", 0),
    "clip_positive_v": Known("positive clip level", "V"),
    "clip_negative_v": Known("negative clip level", "V", -1),
    "output_at_clip_v": Known("output at the onset of clipping, rms", "V"),
    "rail_positive_v": Known("positive rail at idle", "V"),
    "rail_negative_v": Known("negative rail at idle", "V", -1),
    "ripple_positive_v": Known("ripple at idle, positive rail", "V"),
    "ripple_negative_v": Known("ripple at idle, negative rail", "V"),
}
_COLUMNS: Mapping[str, float] = {  # volts rms per unit, or 1
    "output_v": 1.0,
    "output_mv": 1e-3,
    "output_peak_v": math.sqrt(0.5),
    "input_v": 1.0,
    "input_mv": 1e-3,
    "input_peak_v": math.sqrt(0.5),
    "thd_percent": 1.0,
    "frequency_hz": 1.0,
}


@dataclass(frozen=True)
class FigureReading:
    """One figure, in the unit of its name."""

    name: str
    value: float
    line: int


@dataclass(frozen=True)
class LevelReading:
    """Distortion of one sine; volts rms, at the output or at the op-amp's input, or both."""

    output_v: float | None
    input_v: float | None
    thd_percent: float
    frequency_hz: float
    line: int


@dataclass(frozen=True)
class Readings:
    """What a file holds; of `figures`, `levels` and `curve` the one of its kind."""

    file: str
    kind: Literal["figures", "levels", "curve"]
    figures: tuple[FigureReading, ...] = ()
    levels: tuple[LevelReading, ...] = ()
    curve: MeasuredTable | None = None


def read_readings(path: Path) -> Readings:
    """Read a file of measured figures.

    Parameters
    ----------
    path : Path

    Returns
    -------
    Readings

    Raises
    ------
    DesignError
        One sentence with file and line, if the file cannot be read or a row not used.
    """
    rows = list(_rows(path))
    if not rows:
        raise DesignError(f"{path} is empty, {_HEADERS}")
    number, names = rows[0][0], [name.lower() for name in rows[0][1]]
    if set(names) == {"figure", "value"} and len(names) == 2:
        figures = tuple(_each(path, rows[1:], names, _figure))
        _check_once(path, figures)
        return Readings(str(path), "figures", figures=figures)
    if any(name.startswith("thd") for name in names):
        _check_columns(path, number, names)
        if len(rows) > MOST_LEVELS + 1:
            raise DesignError(
                f"{path} holds {len(rows) - 1} rows of distortion, expected {MOST_LEVELS} or fewer"
            )
        return Readings(str(path), "levels", levels=tuple(_each(path, rows[1:], names, _level)))
    if any(name.startswith(("drive_", "input_")) for name in names):
        return Readings(str(path), "curve", curve=read_table(path))
    raise DesignError(
        f"{path}, line {number}: found the column names {shown(','.join(names))}, {_HEADERS}"
    )


def _rows(path: Path) -> Iterator[tuple[int, list[str]]]:
    """Line number and cells of every row that is not a remark, the header first."""
    delimiter = ""
    text = read_text(path, "a table of measured figures")
    for number, line in enumerate(text.splitlines(), start=1):
        content = line.split("#", 1)[0].strip()
        if not content:
            continue
        delimiter = delimiter or (";" if ";" in content else ",")
        try:
            cells = next(csv.reader([content], delimiter=delimiter, skipinitialspace=True))
        except csv.Error as fault:
            raise DesignError(
                f"{path}, line {number}: found {shown(content)}, no row of a table ({fault})"
            ) from None
        yield number, [cell.strip() for cell in cells]


def _each(
    path: Path,
    rows: Sequence[tuple[int, list[str]]],
    names: Sequence[str],
    read: Callable[[Mapping[str, str], int], R],
) -> Iterator[R]:
    """Every row by its columns' names, read; faults as sentences with file and line."""
    if not rows:
        raise DesignError(f"{path} holds a header and no rows, expected one or more")
    for number, cells in rows:
        try:
            if len(cells) != len(names):
                raise ValueError(
                    f"found {len(cells)} columns in {shown(','.join(cells))}, expected "
                    f"{len(names)} (numbers take a decimal point)"
                )
            yield read(dict(zip(names, cells, strict=True)), number)
        except ValueError as fault:
            raise DesignError(f"{path}, line {number}: {fault}") from None


def _figure(row: Mapping[str, str], line: int) -> FigureReading:
    name = row["figure"].lower()
    if name not in FIGURES:
        close = nearest(name, FIGURES)
        offer = f"nearest known: {', '.join(close)}" if close else f"known: {', '.join(FIGURES)}"
        raise ValueError(f"{shown(row['figure'])} is no known figure, {offer}")
    known = FIGURES[name]
    try:
        value = parse_quantity(row["value"], unit_of(name))
    except ValueError as fault:
        raise ValueError(f"{name}: {fault}") from None
    if known.sign * value < 0.0 or (known.sign and value == 0.0 and known.unit != "A"):
        wanted = "a negative number" if known.sign < 0 else "a positive number"
        raise ValueError(f"{name} is {shown(row['value'])}, expected {wanted}")
    return FigureReading(name, value, line)


def _check_once(path: Path, figures: Sequence[FigureReading]) -> None:
    seen: dict[str, int] = {}
    for each in figures:
        if each.name in seen:
            raise DesignError(
                f"{path}, line {each.line}: {each.name} stands already at line "
                f"{seen[each.name]}, expected each figure once"
            )
        seen[each.name] = each.line


def _check_columns(path: Path, number: int, names: Sequence[str]) -> None:
    place = f"{path}, line {number}"
    for name in names:
        if name not in _COLUMNS:
            close = nearest(name, _COLUMNS) or list(_COLUMNS)
            raise DesignError(
                f"{place}: {shown(name)} is no known column, nearest known: {', '.join(close)}"
            )
    for start, least in (("output", 0), ("input", 0), ("thd", 1), ("frequency", 0)):
        count = sum(name.startswith(start) for name in names)
        if not least <= count <= 1:
            raise DesignError(f"{place}: found {count} columns of {start}, expected one")
    if not any(name.startswith(("output", "input")) for name in names):
        raise DesignError(f"{place}: found no column of the level, {_HEADERS}")


def _level(row: Mapping[str, str], line: int) -> LevelReading:
    values: dict[str, float] = {}
    for name, cell in row.items():
        kind = name.split("_")[0]
        value = _number(name, cell) * _COLUMNS[name]
        low, high = {"frequency": (LOWEST_HZ, HIGHEST_HZ), "thd": (_LEAST_THD, 100.0)}.get(
            kind, (0.0, 1000.0)
        )
        if not low <= value <= high or value == 0.0:
            least = "more than 0" if low == 0.0 else f"{low:g}"
            raise ValueError(f"{name} is {shown(cell)}, expected {least} to {high:g}")
        values[kind] = value
    return LevelReading(
        values.get("output"),
        values.get("input"),
        values["thd"],
        values.get("frequency", TONE_HZ),
        line,
    )


def _number(name: str, cell: str) -> float:
    try:
        value = float(cell) if "_" not in cell else math.nan
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise ValueError(f"{name} is {shown(cell)}, expected a number with a decimal point")
    return value
