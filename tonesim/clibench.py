"""Commands of the bench: the sheet, and the spread of many builds."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from tonesim.command import (
    as_json_option,
    check_text_output,
    commands,
    design_options,
    load,
    print_json,
    quantity,
    warn_of_compiling,
)
from tonesim.errors import UsageError

if TYPE_CHECKING:
    from tonesim.tolerance import Tolerances

LEAST_AMBIENT_C, MOST_AMBIENT_C = -40.0, 150.0  # as for the temperatures of a design


@commands.command(
    epilog="\b\nExamples:\n  tonesim bench no-chain\n  tonesim bench full-chain idle heat "
    "--set output.emitter_ohm=0R47\n  tonesim bench full-chain against --against mine.csv"
)
@click.argument("source", metavar="DESIGN")
@click.argument("sections", metavar="[SECTION]...", nargs=-1)
@design_options
@click.option(
    "--ambient", metavar="CELSIUS", default="40", help="Air around the heat sinks; 40 by default."
)
@click.option("--csv", "csv_file", metavar="FILE", help="Write every figure, a line each.")
@click.option(
    "--against",
    "against_file",
    metavar="FILE",
    help="Put figures you measured beside the computed ones (CSV).",
)
@click.option("--pictures", metavar="FOLDER", help="Draw curves and waveforms, SVG and PNG.")
@as_json_option
def bench(
    source: str,
    sections: tuple[str, ...],
    changes: tuple[str, ...],
    parts_file: str | None,
    ambient: str,
    csv_file: str | None,
    against_file: str | None,
    pictures: str | None,
    as_json: bool,
) -> None:
    """Measure a design on the test bench.

    A sheet of what meters, scope and distortion analyser will show, in the order in which one
    measures. SECTION picks parts of it: idle, gain, clip, power, heat, distortion, square,
    stability, power-up. Levels are rms unless called peak; a loudspeaker is replaced by its rated
    resistance except where it is named.

    With --against the section "against" comes last: each figure of your file beside the computed
    one, and the tolerance of a part that would explain the difference. Name it to see it alone.
    """
    from tonesim.readings import read_readings
    from tonesim.sheet import check_sections, measure_sheet

    check_sections(sections, against=against_file is not None)
    readings = None if against_file is None else read_readings(Path(against_file))
    air = quantity("--ambient", ambient, "°C")
    if not LEAST_AMBIENT_C <= air <= MOST_AMBIENT_C:
        raise UsageError(
            f"--ambient is {air:g} °C, expected {LEAST_AMBIENT_C:g} to {MOST_AMBIENT_C:g}"
        )
    if csv_file is not None:
        check_text_output(csv_file, (source, parts_file))
    design, _ = load(source, changes, parts_file)
    warn_of_compiling()
    from tonesim.show import progress_bars, show_sheet
    from tonesim.tables import tables, to_csv

    with progress_bars(1000) as begin:
        rig, sheet = measure_sheet(design, sections, air, begin("bench", 1000), readings)
    drawn: tuple[Path, ...] = ()
    if pictures is not None:
        from tonesim.plot import draw_pictures

        with progress_bars(1000) as begin:
            drawn = draw_pictures(rig, sheet, Path(pictures), begin("pictures", 1000))
    if csv_file is not None:
        from tonesim.wav import write_text_aside

        write_text_aside(csv_file, to_csv(tables(sheet)))
    if as_json:
        print_json(sheet.as_dict())
    else:
        show_sheet(sheet, tables(sheet))
        for path in drawn:
            click.echo(str(path))


@commands.command(
    epilog="\b\nExample:\n  tonesim spread no-chain --runs 20 --resistors 1 --csv builds.csv"
)
@click.argument("source", metavar="DESIGN")
@design_options
@click.option("--runs", type=int, default=200, show_default=True, help="How many builds.")
@click.option("--seed", type=int, default=1, show_default=True, help="Other builds: another seed.")
@click.option(
    "--resistors", metavar="CLASS", default="J", show_default=True, help="Letter, or per cent."
)
@click.option("--vbe", metavar="VOLTS", help="VBE of each transistor, either way; 30 mV.")
@click.option(
    "--hfe", type=float, nargs=2, metavar="LEAST MOST", help="Factors on hFE; 0.5 and 1.6."
)
@click.option("--drops", metavar="VOLTS", help="Forward voltage of each drop, either way; 20 mV.")
@click.option("--offset", metavar="VOLTS", help="Input offset of the op-amp; its sheet's maximum.")
@click.option(
    "--op-amp", type=float, metavar="PERCENT", help="Its current limit and gain-bandwidth; 30."
)
@click.option("--reservoirs", type=float, metavar="PERCENT", help="Reservoir capacitors; 20.")
@click.option("--supply", type=float, metavar="PERCENT", help="Mains, or batteries; 10.")
@click.option("--csv", "table", metavar="FILE", help="All builds as a table, one row each.")
@click.option(
    "--save-worst",
    "worst",
    metavar="FIGURE FILE",
    nargs=2,
    multiple=True,
    help="The build worst by a figure as a design file: idle, offset, gain, clip-upper, "
    "clip-lower, thd-loud, thd-quiet; may be repeated.",
)
@as_json_option
def spread(
    source: str,
    changes: tuple[str, ...],
    parts_file: str | None,
    as_json: bool,
    **given: Any,
) -> None:
    """Draw many builds of a design from parts within their tolerances.

    How far idle current, offset, gain, clip levels and distortion lie apart, and which parts that
    comes from. Builds that cannot idle or whose parts cannot bear it are counted with the reason.
    The same seed draws the same builds. Nothing is trimmed, and temperatures stay as they are.
    """
    design, _ = load(source, changes, parts_file)
    from tonesim.showspread import show_spread
    from tonesim.spread import check_place, run_spread, table_text, worst_text, write_place

    tolerances = _tolerances(given)
    worst = [(_figure_named(name), path) for name, path in given["worst"]]
    places = [path for _, path in worst] + ([given["table"]] if given["table"] else [])
    _check_places(places, source)
    for place in places:
        check_place(place)
    warn_of_compiling()
    from tonesim.show import progress_bars

    with progress_bars(given["runs"]) as begin:
        advance = begin("builds", given["runs"])
        report = run_spread(design, given["runs"], tolerances, given["seed"], advance)
    if given["table"]:
        write_place(given["table"], table_text(report))
    for figure, path in worst:
        write_place(path, worst_text(report, design, figure))
    if as_json:
        print_json(report.as_dict())
    else:
        show_spread(report)


def _tolerances(given: dict[str, Any]) -> Tolerances:
    """Tolerances from the options; what is not given keeps its default."""
    from tonesim.tolerance import Tolerances, resistor_percent

    chosen: dict[str, float] = {"resistors_percent": resistor_percent(given["resistors"])}
    for option, key in (("vbe", "vbe_v"), ("drops", "diode_v"), ("offset", "offset_v")):
        if given[option] is not None:
            chosen[key] = quantity(f"--{option}", given[option], "V")
    for option, key in (
        ("op_amp", "op_amp_percent"),
        ("reservoirs", "reservoir_percent"),
        ("supply", "supply_percent"),
    ):
        if given[option] is not None:
            chosen[key] = given[option]
    if given["hfe"]:
        chosen["hfe_least"], chosen["hfe_most"] = given["hfe"]
    return Tolerances(**chosen)


def _figure_named(name: str) -> str:
    """Key of the figure that --save-worst names."""
    from tonesim.spread import QUANTITIES

    keys = {quantity.name: key for key, quantity in QUANTITIES.items()}
    if name not in keys:
        raise UsageError(f"--save-worst names {name!r}, expected one of {', '.join(keys)}")
    return keys[name]


def _check_places(places: Sequence[str], source: str) -> None:
    """Refuse one place for two results, and the design's own file."""
    from tonesim.wav import refuse_same_file

    for k, place in enumerate(places):
        if any(os.path.abspath(place) == os.path.abspath(other) for other in places[:k]):
            raise UsageError(f"{place} is asked for twice, expected a name for each result")
        refuse_same_file(place, [source])
