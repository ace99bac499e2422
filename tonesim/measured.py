"""Measured static curves: a table of drive or input against output volts, read and judged.

A table is CSV: one line of two column names with their units, then a row a line; comma or
semicolon between columns, a decimal point inside numbers, `#` before remarks. ``drive_v`` is
the op-amp's output against ground, ``input_v`` the stage's input with the loop closed; either
may be in millivolts (``drive_mv``). Rows go up or down, through both polarities, until the
output no longer follows.
"""

import csv
import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from statistics import linear_regression
from typing import Literal

from tonesim.errors import DesignError
from tonesim.record import read_text, shown

Kind = Literal["drive", "input"]

LEAST_ROWS, MOST_ROWS = 5, 10_000
NOISE = 0.005  # share of the largest output by which a reading may fall: four counts in 1000
METER = 0.01  # the same for drive minus output, which is a difference of two readings
LEAST_SERIES = 1e-3  # a law's drive leads its output by at least this share of the output
_LEAST_GAIN = 1.05  # of a closed loop
_APART = 0.05  # share of the largest output between rows whose slope can be read
_END = 0.05  # the end of a table is this share of its largest output
_FOLLOWS = 0.3  # share of the steepest slope above which the output still follows there
_SCALES = {"v": 1.0, "mv": 1e-3}
_COLUMNS = ("drive", "input", "output")
_HEADER = 'expected "drive_v,output_v" or "input_v,output_v" (_mv for millivolts)'


@dataclass(frozen=True)
class MeasuredTable:
    """A judged table, its rows ascending.

    `driven_v` (N,) is the drive node's or the input's voltage, `output_v` (N,) the output's.
    """

    kind: Kind
    driven_v: tuple[float, ...]
    output_v: tuple[float, ...]

    @property
    def gain(self) -> float:
        """Output over input where the table is steepest; 1 for a table of the drive."""
        return 1.0 if self.kind == "drive" else steepest(self.driven_v, self.output_v)

    @property
    def drive_gain(self) -> float:
        """Drive of the law over the table's voltage: a closed loop's leads by the least lead."""
        return 1.0 if self.kind == "drive" else self.gain * (1.0 + LEAST_SERIES)

    @property
    def still_rises(self) -> tuple[bool, bool]:
        """Whether the output still follows at the last row of the lower and the upper side."""
        rows = list(zip(self.driven_v, self.output_v, strict=True))
        full = steepest(self.driven_v, self.output_v)
        stretch_v = _END * max(map(abs, self.output_v)) / full

        def end(inward: Sequence[tuple[float, float]]) -> bool:
            x0, y0 = inward[0]
            far = (k for k in range(1, len(inward)) if abs(inward[k][0] - x0) >= stretch_v)
            x, y = inward[next(far, len(inward) - 1)]
            return abs(y - y0) > _FOLLOWS * full * abs(x - x0)

        return end(rows), end(rows[::-1])


def steepest(x: Sequence[float], y: Sequence[float]) -> float:
    """Steepest slope of a curve's middle and of its two flanks, by regression.

    The middle is where the output is below 30 % of its largest, a flank from there to 70 %.
    Where one of them holds fewer than three rows, neighbours at least 5 % apart count too.

    Examples
    --------
    >>> steepest([-2.0, -1.0, 0.0, 1.0, 2.0], [-9.0, -9.0, 0.0, 9.0, 9.0])
    9.0
    """
    most = max(map(abs, y))
    slopes = []
    sparse = False
    for low, high in ((-0.7, -0.3), (-0.3, 0.3), (0.3, 0.7)):
        part = [k for k, v in enumerate(y) if low * most <= v <= high * most]
        if len(part) > 2:
            slopes.append(linear_regression([x[k] for k in part], [y[k] for k in part]).slope)
        else:
            sparse = True
    if sparse:
        pairs = itertools.pairwise(zip(x, y, strict=True))
        slopes += [
            (y1 - y0) / (x1 - x0) for (x0, y0), (x1, y1) in pairs if y1 - y0 >= _APART * most
        ]
    return max(slopes)


def judge_table(
    kind: Kind,
    driven_v: Sequence[float],
    output_v: Sequence[float],
    places: Sequence[str] | None = None,
) -> MeasuredTable:
    """Judge the rows of a table.

    Parameters
    ----------
    kind : "drive" or "input"
    driven_v, output_v : (N,) sequence of float
        Volts.
    places : (N,) sequence of str, optional
        What a sentence calls each row; "row 1" and so on by default.

    Raises
    ------
    ValueError
        One sentence that names the rows, if they are too few or too many, run neither up nor
        down, repeat a voltage, fall where they should rise, show one polarity only, or rise
        faster than a follower can.
    """
    names = list(places) if places else [f"row {k + 1}" for k in range(len(driven_v))]
    column = f"{kind}_v"
    if len(driven_v) != len(output_v):
        raise ValueError(
            f"{column} holds {len(driven_v)} values and output_v {len(output_v)}, expected as many"
        )
    if not LEAST_ROWS <= len(driven_v) <= MOST_ROWS:
        raise ValueError(
            f"found {len(driven_v)} rows, expected {LEAST_ROWS} to {MOST_ROWS}, from negative "
            "clip to positive clip"
        )
    rows = list(zip(driven_v, output_v, names, strict=True))
    if rows[0][0] > rows[-1][0]:
        rows.reverse()
    _judge_order(rows, column)
    _judge_output(rows, column)
    table = MeasuredTable(kind, tuple(r[0] for r in rows), tuple(r[1] for r in rows))
    _judge_gain(rows, table, column)
    return table


Row = tuple[float, float, str]


def _judge_order(rows: Sequence[Row], column: str) -> None:
    seen: dict[float, str] = {}
    for x, _y, name in rows:
        if x in seen:
            raise ValueError(
                f"{name}: {column} {x:g} V stands already at {seen[x]}, expected each voltage once"
            )
        seen[x] = name
    for (x0, _, before), (x1, _, name) in itertools.pairwise(rows):
        if x1 < x0:
            raise ValueError(
                f"{name}: {column} is {x1:g} V beside {x0:g} V at {before}, expected rows in one "
                "direction"
            )


def _judge_output(rows: Sequence[Row], column: str) -> None:
    most = max(abs(y) for _, y, _ in rows)
    if rows[-1][1] < rows[0][1]:
        raise ValueError(
            f"{rows[-1][2]}: output_v falls as {column} rises, expected it to rise; one of the two "
            "was measured with its leads exchanged"
        )
    _, top, top_name = rows[0]
    for _, y, name in rows:
        if y < top - NOISE * most:
            raise ValueError(
                f"{name}: output_v is {y:g} V after {top:g} V at {top_name}, expected it not to "
                f"fall while {column} rises (noise up to {100 * NOISE:g} % is smoothed)"
            )
        if y > top:
            top, top_name = y, name
    for side, sign in (("positive", 1.0), ("negative", -1.0)):
        count = sum(sign * y > NOISE * most for _, y, _ in rows)
        if count < 2:
            raise ValueError(
                f"found {count} rows with a {side} output, expected 2 or more of either polarity"
            )


def _judge_gain(rows: Sequence[Row], table: MeasuredTable, column: str) -> None:
    gain, most = table.gain, max(map(abs, table.output_v))
    exchanged = "are the two columns exchanged?"
    if table.kind == "input" and gain < _LEAST_GAIN:
        raise ValueError(
            f"output_v rises {gain:.3g} times as fast as {column}, expected {_LEAST_GAIN:g} times "
            f"or more; {exchanged}"
        )
    x0, y0, before = rows[0]
    for x, y, name in rows:
        if gain * (x - x0) < y - y0 - METER * most:
            expected = (
                f"no more than {column}; {exchanged}"
                if table.kind == "drive"
                else f"at most {gain:.3g} times as much, as between the others"
            )
            raise ValueError(
                f"{name}: output_v rises by {y - y0:.4g} V from {before}, {column} by "
                f"{x - x0:.4g} V, expected {expected}"
            )
        if gain * x - y > gain * x0 - y0:
            x0, y0, before = x, y, name


def read_table(path: Path) -> MeasuredTable:
    """Read a measured curve.

    Parameters
    ----------
    path : Path

    Returns
    -------
    MeasuredTable

    Raises
    ------
    DesignError
        One sentence with file and line, if the file cannot be read or the table not used.
    """
    text = read_text(path, "a table of two columns")
    header: tuple[Kind, tuple[float, float], bool] | None = None
    delimiter = ","
    pairs, places = [], []
    for number, line in enumerate(text.splitlines(), start=1):
        content = line.split("#", 1)[0].strip()
        if not content:
            continue
        place = f"line {number}"
        try:
            if header is None:
                delimiter = ";" if ";" in content else ","
                header = _header(_cells(content, delimiter))
                continue
            pairs.append(_row(_cells(content, delimiter), header[1], header[2]))
        except ValueError as fault:
            raise DesignError(f"{path}, {place}: {fault}") from None
        places.append(place)
    if header is None:
        raise DesignError(f"{path} is empty, {_HEADER}")
    try:
        return judge_table(header[0], [p[0] for p in pairs], [p[1] for p in pairs], places)
    except ValueError as fault:
        join = ", " if str(fault).startswith("line ") else ": "
        raise DesignError(f"{path}{join}{fault}") from None


def _cells(content: str, delimiter: str) -> list[str]:
    try:
        return [
            cell.strip()
            for cell in next(csv.reader([content], delimiter=delimiter, skipinitialspace=True))
        ]
    except csv.Error as fault:
        raise ValueError(f"found {shown(content)}, no row of a table ({fault})") from None


def _header(cells: Sequence[str]) -> tuple[Kind, tuple[float, float], bool]:
    """Kind of table, volts per unit of either column, and whether the output stands first."""
    found = shown(",".join(cells))
    columns = [cell.lower().rpartition("_") for cell in cells]
    if any(name not in _COLUMNS or unit not in _SCALES for name, _, unit in columns):
        raise ValueError(f"found the column names {found}, {_HEADER}")
    names = [name for name, _, _ in columns]
    if len(names) != 2 or names.count("output") != 1:
        raise ValueError(f"found the column names {found}, {_HEADER}")
    kind: Kind = "drive" if "drive" in names else "input"
    return kind, (_SCALES[columns[0][2]], _SCALES[columns[1][2]]), names[0] == "output"


def _row(
    cells: Sequence[str], scales: tuple[float, float], output_first: bool
) -> tuple[float, float]:
    if len(cells) != 2:
        raise ValueError(
            f"found {len(cells)} columns in {shown(','.join(cells))}, expected 2 (numbers take a "
            "decimal point)"
        )
    first, second = (_volts(c, scale) for c, scale in zip(cells, scales, strict=True))
    return (second, first) if output_first else (first, second)


def _volts(cell: str, scale: float) -> float:
    try:
        value = float(cell) if "_" not in cell else math.nan
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise ValueError(f"found {shown(cell)}, expected a number with a decimal point")
    return value * scale
