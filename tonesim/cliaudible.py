"""The command that asks the ear."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from tonesim.command import (
    as_json_option,
    check_text_output,
    commands,
    design_options,
    find_recording,
    load,
    played,
    played_options,
    print_json,
    quantity,
    warn_of_compiling,
)
from tonesim.errors import UsageError

if TYPE_CHECKING:
    from tonesim.audition import Audition
    from tonesim.design import Design
    from tonesim.ear import Listening
    from tonesim.report import RenderOptions
    from tonesim.settle import Candidate


@commands.command(
    epilog="\b\nExample:\n  tonesim audible quiet_picking -d partial-chain --cabinet open-back-12"
)
@click.argument("recordings", metavar="RECORDING...", nargs=-1, required=True)
@click.option(
    "-d", "--design", "source", metavar="DESIGN", required=True, help="Design file, or a preset."
)
@design_options
@click.option(
    "--spl",
    metavar="DB",
    default="82",
    show_default=True,
    help="Level at your ears of a sine of 1 V peak across the load, dB SPL; 82 is a loudspeaker "
    "of 100 dB (1 W, 1 m) heard at 2 m.",
)
@click.option(
    "--room",
    metavar="DBA",
    default="30",
    show_default=True,
    help="Steady noise of the room, or none.",
)
@click.option("--channel", type=int, metavar="N", help="Only this channel, counted from 1.")
@played_options
@click.option("--csv", "csv_file", metavar="FILE", help="Write every frame, a line each.")
@click.option(
    "--residual",
    metavar="OUT",
    help="Write what the bias adds, to listen to; one recording, one channel.",
)
@click.option(
    "--boost", metavar="DB", default="20", show_default=True, help="Gain of the residual's file."
)
@click.option("--repair", is_flag=True, help="Replace samples that are not finite by zero.")
@as_json_option
def audible(
    recordings: tuple[str, ...],
    source: str,
    changes: tuple[str, ...],
    parts_file: str | None,
    spl: str,
    room: str,
    channel: int | None,
    csv_file: str | None,
    residual: str | None,
    boost: str,
    repair: bool,
    as_json: bool,
    **given: Any,
) -> None:
    """Say whether a design's distortion is audible on a recording.

    Each RECORDING is played through the design and through two twins of it: one without the dead
    zone, so that what lies between them is what the choice of bias adds, and a linear one, so
    that what lies between them is all distortion. Two models of the ear judge the difference
    frame by frame: a strict one may say inaudible, a lenient one audible; between them you listen.
    """
    from tonesim.audition import write_residual
    from tonesim.show import progress_bars

    if channel is not None and channel < 1:
        raise UsageError(f"--channel is {channel}, channels are counted from 1")
    listening = _listening(spl, room)
    paths = [find_recording(name) for name in recordings]
    if csv_file is not None:
        check_text_output(csv_file, (source, parts_file, *map(str, paths)))
    if residual is not None:
        check_text_output(residual, (source, parts_file, *map(str, paths)))
        if len(paths) != 1:
            raise UsageError(f"--residual takes one recording, found {len(paths)}")
    gain_db = quantity("--boost", boost, "dB")
    design, catalogue = load(source, changes, parts_file)
    design = played(design, catalogue, given)
    said = ""
    if residual is None:
        found = _audition_all(paths, design, listening, channel, repair)
    else:
        options = _options(channel, repair)
        warn_of_compiling()
        with progress_bars(1000) as begin:
            found, clipped = write_residual(
                paths[0],
                Path(residual),
                design,
                listening,
                options,
                gain_db,
                begin(paths[0].name, 1000),
            )
        said = f"written: {residual}, boosted by {gain_db:g} dB, {clipped} sample(s) clipped"
    if csv_file is not None:
        from tonesim.hearing import frames_csv
        from tonesim.wav import write_text_aside

        write_text_aside(csv_file, frames_csv(found))
    if as_json:
        print_json({"auditions": [each.as_dict() for each in found]})
        return
    from tonesim.show import show_auditions

    show_auditions(found)
    if said:
        click.echo(said)


@commands.command(
    epilog="\b\nExamples:\n  tonesim settle quiet_picking -d full-chain --drop 1N4148 --most 2\n"
    "  tonesim settle quiet_picking -d vbe-multiplier --key "
    "bias.multiplier.collector_base_ohm --between 560 820"
)
@click.argument("recordings", metavar="RECORDING...", nargs=-1, required=True)
@click.option(
    "-d", "--design", "source", metavar="DESIGN", required=True, help="Design file, or a preset."
)
@design_options
@click.option(
    "--drop",
    "drops",
    metavar="NAME",
    multiple=True,
    help="A drop to build chains of; several make mixes. By default the first of the design's.",
)
@click.option("--most", type=int, default=3, show_default=True, help="Drops of a half at most.")
@click.option(
    "--chain",
    "chains",
    metavar="DROPS",
    multiple=True,
    help="Try just these: 1N4148,1N4148 for both halves, 1N4148,BAT85/1N4148 apart, or none.",
)
@click.option("--key", metavar="KEY", help="Settle this value instead, along the E24 series.")
@click.option("--between", metavar="LOW HIGH", nargs=2, help="Range of the value, as in 1k 3k3.")
@click.option("--spl", metavar="DB", default="82", show_default=True, help="As for audible.")
@click.option("--room", metavar="DBA", default="30", show_default=True, help="As for audible.")
@played_options
@click.option("--save", "saved", metavar="FILE", help="Write the chosen design.")
@as_json_option
def settle(
    recordings: tuple[str, ...],
    source: str,
    changes: tuple[str, ...],
    parts_file: str | None,
    spl: str,
    room: str,
    saved: str | None,
    as_json: bool,
    **given: Any,
) -> None:
    """Find the least bias that hides the crossover on all recordings.

    Chains of drops, from none to --most a half, are each played on every RECORDING, and the ear
    says what the bias adds (see audible). With --key a single value is settled along the E24
    series instead, by halving. Printed is the ladder with idle current, heat, distortion and
    margin of every rung, the least that suffices, its neighbours, and what heat does to it.
    """
    from tonesim.settle import climb, halve

    listening = _listening(spl, room)
    paths = [find_recording(name) for name in recordings]
    if saved is not None:
        check_text_output(saved, (source, parts_file, *map(str, paths)))
    design, catalogue = load(source, changes, parts_file)
    design = played(design, catalogue, given)
    candidates = _candidates(design, given)
    warn_of_compiling()
    from tonesim.show import progress_bars, show_settled

    search = climb if given["key"] is None else halve
    with progress_bars(1000) as begin:
        found = search(design, candidates, paths, listening, progress=begin("settle", 1000))
    if saved is not None and found.chosen is not None:
        from tonesim.designfile import design_to_toml
        from tonesim.wav import write_text_aside

        write_text_aside(saved, design_to_toml(found.chosen.design))
    if as_json:
        print_json(found.as_dict())
        return
    heard = f"Heard at {listening.sine_spl_db:g} dB SPL for a sine of 1 V peak, room noise {room}."
    show_settled(design.title, heard, found)
    if saved is not None:
        click.echo(f"written: {saved}" if found.chosen else f"{saved} is not written")


def _candidates(design: Design, given: dict[str, Any]) -> tuple[Candidate, ...]:
    """Rungs of the ladder the options ask for."""
    from tonesim.settle import chain_ladder, stated_chains, value_ladder
    from tonesim.units import E24, preferred_between

    key, between = given["key"], given["between"]
    if (key is None) != (between is None):
        raise UsageError("--key and --between belong together")
    if key is not None:
        low, high = (quantity("--between", text, "") for text in between)
        values = preferred_between(low, high, E24)
        if not values:
            raise UsageError(f"no value of E24 lies between {between[0]} and {between[1]}")
        return value_ladder(key, values)
    if given["chains"]:
        return stated_chains(given["chains"])
    own = [drop.name for drop in (*design.bias.upper, *design.bias.lower)][:1]
    drops = list(given["drops"]) or own
    if not drops:
        raise UsageError(
            "the design has no drops: name one with --drop, or chains with --chain, or a value "
            "with --key and --between"
        )
    return chain_ladder(design, drops, given["most"])


def _listening(spl: str, room: str) -> Listening:
    """Level and room as the options say."""
    from tonesim.ear import Listening

    return Listening(
        quantity("--spl", spl, "dB"),
        None if room.lower() == "none" else quantity("--room", room, "dB"),
    )


def _options(channel: int | None, repair: bool) -> RenderOptions:
    """How the recordings are played; the channel is counted from 1."""
    from tonesim.report import RenderOptions

    return RenderOptions(channel=None if channel is None else channel - 1, repair=repair)


def _audition_all(
    paths: list[Path], design: Design, listening: Listening, channel: int | None, repair: bool
) -> list[Audition]:
    from tonesim.audition import audition
    from tonesim.show import progress_bars
    from tonesim.wav import open_recording

    options = _options(channel, repair)
    lengths = []
    for path in paths:  # all that can be seen before the work begins
        with open_recording(path, repair=repair) as recording:
            lengths.append(recording.info.frames)
    warn_of_compiling()
    found: list[Audition] = []
    with progress_bars(sum(lengths)) as begin:
        for path, frames in zip(paths, lengths, strict=True):
            with open_recording(path, repair=repair) as recording:
                found += audition(recording, design, listening, options, begin(path.name, frames))
    return found
