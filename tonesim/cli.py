"""The command line: sound, parts and presets; the bench and the ear bring their own commands."""

from __future__ import annotations

import json
import os
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from tonesim import cliaudible, clibench
from tonesim.command import (
    KINDS,
    as_json_option,
    commands,
    design_options,
    find_recording,
    load,
    new_folder,
    played,
    played_options,
    print_json,
    warn_of_compiling,
)
from tonesim.errors import OutputError, UsageError

if TYPE_CHECKING:
    from tonesim.design import Design
    from tonesim.report import RenderOptions, RenderReport

__all__ = ["cliaudible", "clibench", "commands"]


@commands.command(
    epilog="\b\nExample:\n  tonesim render low_riff -d full-chain --set bias.feed_ohm=4k7"
)
@click.argument("recordings", metavar="RECORDING...", nargs=-1, required=True)
@click.option(
    "-d", "--design", "source", metavar="DESIGN", required=True, help="Design file, or a preset."
)
@click.option(
    "-o",
    "--output",
    metavar="OUT",
    help="File (.wav, .flac, .aiff, .w64, .caf, .ogg) or existing folder; by default "
    "RECORDING.DESIGN.wav in the current folder.",
)
@design_options
@click.option("--channel", type=int, metavar="N", help="Only this channel, counted from 1.")
@played_options
@click.option(
    "--match",
    type=float,
    metavar="LUFS",
    help="Bring the result to this loudness; its true peak stays at or below -1 dBTP.",
)
@click.option(
    "--output-full-scale",
    type=float,
    metavar="VOLTS",
    help="Volts that 0 dBFS of the result stands for; by default more than the stage brings: 1.5 "
    "times the highest rail + 2 V, times the cabinet's largest gain.",
)
@click.option(
    "--subtype",
    metavar="KIND",
    help="Samples of the result: 16 (dithered), 24 (default), 32, float, double, vorbis.",
)
@click.option("--repair", is_flag=True, help="Replace samples that are not finite by zero.")
@click.option(
    "--multiply",
    type=int,
    default=1,
    metavar="N",
    help="Internal rate times N (2, 4, 8): more accurate and slower.",
)
@click.option("--force", is_flag=True, help="Replace a file that tonesim has no record of writing.")
@as_json_option
def render(
    recordings: tuple[str, ...],
    source: str,
    output: str | None,
    changes: tuple[str, ...],
    parts_file: str | None,
    as_json: bool,
    **given: Any,
) -> None:
    """Render recordings through a design.

    RECORDING is a file, or one of those shipped by its name (quiet_picking, strummed_chords,
    low_riff). Each becomes a file of the same length, aligned to the sample, and a report beside it
    (the same name, ending in .json). The result is the voltage across the load, or what the cabinet
    makes of it. A result rendered again replaces the old one; a file of other origin is left alone.
    """
    design, catalogue = load(source, changes, parts_file)
    design = played(design, catalogue, given)
    options = _render_options(given)
    paths = [find_recording(name) for name in recordings]
    outs = _outputs(paths, output, Path(source).stem)
    reports = _render_all(paths, outs, design, options, quiet=as_json)
    if as_json:
        print_json({"renders": [report.as_dict() for report in reports]})


def _render_options(given: dict[str, Any]) -> RenderOptions:
    from tonesim.report import RenderOptions

    channel = given["channel"]
    if channel is not None and channel < 1:
        raise UsageError(f"--channel is {channel}, channels are counted from 1")
    return RenderOptions(
        channel=None if channel is None else channel - 1,
        match_lufs=given["match"],
        output_full_scale_v=given["output_full_scale"],
        subtype=given["subtype"],
        repair=given["repair"],
        multiply=given["multiply"],
        replace=given["force"],
    )


def _outputs(recordings: Sequence[Path], output: str | None, design_stem: str) -> list[Path]:
    """Where each recording goes; two into one place are refused."""
    target = Path(output or ".")
    if target.is_dir():
        outs = [target / f"{path.stem}.{design_stem}.wav" for path in recordings]
    elif output is not None and output.endswith(("/", os.sep)):
        raise OutputError(f"the folder {output} does not exist")
    elif len(recordings) > 1:
        raise UsageError(f"{len(recordings)} recordings cannot go into one file, {target}")
    else:
        outs = [target]
    taken: dict[Path, Path] = {}
    for path, out in zip(recordings, outs, strict=True):
        if out in taken:
            raise UsageError(f"{taken[out]} and {path} would both become {out}")
        taken[out] = path
    return outs


def _render_all(
    paths: Sequence[Path],
    outs: Sequence[Path],
    design: Design,
    options: RenderOptions,
    *,
    quiet: bool,
) -> list[RenderReport]:
    from tonesim.render import render as render_file
    from tonesim.report import check_output
    from tonesim.show import progress_bars, show_render
    from tonesim.wav import open_recording

    lengths = []
    for path, out in zip(paths, outs, strict=True):  # all that can be seen before the work begins
        check_output(out, paths, design, replace=options.replace)
        with open_recording(path, repair=options.repair) as recording:
            lengths.append(recording.info.frames)
    warn_of_compiling()
    reports: list[RenderReport] = []
    try:
        with progress_bars(sum(lengths)) as begin:
            for path, out, frames in zip(paths, outs, lengths, strict=True):
                reports.append(render_file(path, out, design, options, begin(path.name, frames)))
    finally:  # what is finished is told even if a later one fails
        for report in [] if quiet else reports:
            show_render(report)
    return reports


@commands.command(epilog="\b\nExample:\n  tonesim check full-chain --set output.temperature_c=60")
@click.argument("source", metavar="DESIGN")
@design_options
@as_json_option
def check(source: str, changes: tuple[str, ...], parts_file: str | None, as_json: bool) -> None:
    """Validate a design and print its bench figures at rest.

    Idle currents, chain and feed, rails and ripple, offset, gain, draw and heat, and the level at
    which each half clips for slow signals, with what sets it. "Gained without" says how much
    further the output would go if that limit alone were lifted.
    """
    design, _ = load(source, changes, parts_file)
    warn_of_compiling()
    from tonesim.check import check_design

    found = check_design(design)
    if as_json:
        print_json(found.as_dict())
    else:
        from tonesim.show import show_check

        show_check(found)


@commands.command(
    epilog="\b\nExamples:\n  tonesim parts diodes\n  tonesim parts transistors TIP122"
)
@click.argument("kind", required=False, type=click.Choice(KINDS, case_sensitive=False))
@click.argument("name", required=False)
@click.option("--parts", "parts_file", metavar="FILE", help="A part file of your own as well.")
@as_json_option
def parts(kind: str | None, name: str | None, parts_file: str | None, as_json: bool) -> None:
    """List parts, or show all values of one.

    A design names its parts by these names; with a kind and a name, the values and their source.
    """
    from tonesim.catalogue import load_catalogue

    catalogue = load_catalogue(None if parts_file is None else Path(parts_file))
    if kind is not None and name is not None:
        part = catalogue.part(kind, name)
        if as_json:
            print_json(part.model_dump(mode="json"))
            return
        from tonesim.show import show_part

        show_part(part)
        return
    listed = {each: getattr(catalogue, each) for each in (KINDS if kind is None else (kind,))}
    if as_json:
        print_json(
            {
                each: {name: part.model_dump(mode="json") for name, part in found.items()}
                for each, found in listed.items()
            }
        )
        return
    from tonesim.show import show_parts

    for each, found in listed.items():
        show_parts(each, list(found.values()))


@commands.command(epilog="\b\nExample:\n  tonesim presets no-chain > mine.toml")
@click.argument("name", required=False)
@as_json_option
def presets(name: str | None, as_json: bool) -> None:
    """List the designs shipped, or print one.

    What is printed is a design file to start from.
    """
    from tonesim.designfile import list_presets, presets_folder
    from tonesim.record import nearest, read_toml

    known = list_presets()
    if name is not None and name not in known:
        close = nearest(name, known) or known
        raise UsageError(f"no preset is called {name!r}, nearest known: {', '.join(close)}")
    texts = {
        each: (presets_folder() / f"{each}.toml").read_text(encoding="utf-8") for each in known
    }
    if name is not None:
        click.echo(json.dumps({"name": name, "text": texts[name]}) if as_json else texts[name])
        return
    rows = [
        (
            each,
            str(read_toml(presets_folder() / f"{each}.toml")["title"]),
            text.partition("\n")[0].removeprefix("#").strip(),
        )
        for each, text in texts.items()
    ]
    if as_json:
        print_json({each: {"title": title, "about": about} for each, title, about in rows})
        return
    from tonesim.show import print_table

    print_table("presets", ("name", "title", "about"), rows)


@commands.command(epilog="\b\nExample:\n  tonesim demo listening")
@click.argument("folder", default="tonesim-demo")
@as_json_option
def demo(folder: str, as_json: bool) -> None:
    """Render what is shipped through three bias chains.

    The three designs differ in their bias chain only, and all results are equally loud. They go
    into FOLDER, ./tonesim-demo by default; what to listen for is said with its figures.
    """
    warn_of_compiling()
    from tonesim.demo import run_demo
    from tonesim.show import progress_bars, show_demo

    target = Path(folder)
    with new_folder(target), progress_bars(1000) as begin:
        told = run_demo(target, begin("demo", 1000))
    if as_json:
        print_json(told.as_dict())
    else:
        show_demo(told)
