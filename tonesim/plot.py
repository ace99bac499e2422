"""Pictures of a design on the bench.

One function a picture, here and in `plot_sines`; each takes measured data and returns a figure of
its own. `draw_pictures` draws whatever the sections of a sheet allow. Lines hold the data as they
are, in SI units; ticks carry engineering units.
"""

from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np

from tonesim.bench import Bench
from tonesim.curve import ClipLevel
from tonesim.errors import OutputError
from tonesim.idle import IdleAt, IdleSheet
from tonesim.paper import (
    LOOKS,
    SHADE,
    Axes,
    Figure,
    Look,
    finish,
    line,
    linear,
    logarithmic,
    looks,
    new_figure,
    on_paper,
    quantity,
    refuse_foreign,
    save_picture,
    targets,
    value_span,
)
from tonesim.pictures import (
    CROSSING_HZ,
    SPECTRUM_DB,
    Course,
    Curve,
    Held,
    PoweredUp,
    Square,
    Supplied,
    as_it_comes,
    at_idle,
    burst_course,
    gain_curves,
    held_of,
    line_spectrum,
    power_up_course,
    square_course,
    zero_crossing,
)
from tonesim.plot_sines import draw_crossings, draw_spectra, draw_thd_frequency, draw_thd_level
from tonesim.pool import Progress
from tonesim.power import RailInBurst
from tonesim.sheet import Sheet
from tonesim.signals import Signal
from tonesim.transient import SQUARE_SHARES, SquareSheet

_INK, _SECOND = LOOKS[:2]
_NEAR_V = 1.0  # drive shown around zero where there is no dead zone
_MIDDLE = 0.7  # share of the swing that counts as far from clipping
_LEAST_A = 1e-9  # idle current below this is drawn at it
_EDGE = (-1.0, 5.0)  # rise times around an edge
_SETTLED = 0.05  # of the largest value: how near counts as settled
_LEAST_S = 0.1  # of a power-up that is shown


# ---- static ----


@on_paper()
def draw_transfer(curve: Curve, clips: Sequence[ClipLevel], held: Held) -> Figure:
    """Output against the drive node, and the same magnified around zero.

    `clips` are the levels marked, upper and lower half.
    """
    figure, (axes,) = new_figure("Static transfer curve of the output pair", 5.0)
    line(axes, curve.drive_v, curve.output_v, _INK)
    for clip in clips:
        axes.axhline(clip.level_v, color=_SECOND.color, linestyle=_SECOND.line, linewidth=1.0)
        upper = clip.level_v > 0.0
        axes.annotate(
            f"clips at {quantity(clip.level_v, 'V')}: {clip.cause}",
            (0.02 if upper else 0.98, clip.level_v),
            xycoords=("axes fraction", "data"),
            xytext=(0, 3 if upper else -4),
            textcoords="offset points",
            ha="left" if upper else "right",
            va="bottom" if upper else "top",
        )
    linear(axes.xaxis, "drive node", "V", float(np.max(np.abs(curve.drive_v))))
    linear(axes.yaxis, "output", "V", float(np.max(np.abs(curve.output_v))))
    axes.margins(y=0.12)
    inset = axes.inset_axes((0.61, 0.27, 0.25, 0.25))
    line(inset, curve.drive_v, curve.output_v, _INK)
    zone = curve.dead_zone_v
    reach = 1.6 * max(-zone[0], zone[1]) if zone else _NEAR_V
    near = np.abs(curve.drive_v) <= reach
    high = max(float(np.max(np.abs(curve.output_v[near]))), 1e-3)
    inset.set(xlim=(-reach, reach), ylim=(-1.1 * high, 1.1 * high))
    linear(inset.xaxis, "drive node", "V", reach)
    linear(inset.yaxis, "output", "V", 1.1 * high)
    inset.yaxis.tick_right()
    inset.yaxis.set_label_position("right")
    if zone:
        inset.axvspan(*zone, color=SHADE)
        told = f"dead zone {quantity(zone[1] - zone[0], 'V')}"
    else:
        told = "no dead zone"
    inset.set_title(told)
    fixed = f"{at_idle(held)} Clip levels: direct current, with what limits them."
    return finish(figure, held.title, fixed)


@on_paper()
def draw_gain(curves: Sequence[Curve], held: Held) -> Figure:
    """Small-signal gain of the pair across the swing, whole and magnified; the first is the design.

    The picture of D. Self, Audio Power Amplifier Design (from memory), for bias and crossover.
    """
    figure, (whole, near) = new_figure("Small-signal gain of the output pair", 4.4, columns=2)
    first = curves[0]
    swing = float(np.max(np.abs(first.output_v)))
    for curve, look in zip(curves, looks(len(curves)), strict=True):
        label = f"{curve.label}, idle {quantity(curve.idle_a, 'A')}"
        line(whole, curve.output_v, curve.gain, look, label)
        line(near, curve.output_v, curve.gain, look)
    reach = 0.3 * swing
    whole.set(ylim=(0.0, 1.02), ylabel="gain, d output / d drive (V/V)")
    near.set_ylabel("gain (V/V)")
    whole.set_title("whole swing")
    middle = first.gain[np.abs(first.output_v) < _MIDDLE * swing]
    top = float(np.max([np.max(curve.gain) for curve in curves]))
    room = max(1.6 * (top - float(np.min(middle))), 0.04)
    near.set(xlim=(-reach, reach), ylim=(max(top - room, 0.0), min(top + 0.08 * room, 1.02)))
    near.set_title("around zero, magnified")
    for axes, most in ((whole, swing), (near, reach)):
        linear(axes.xaxis, "output", "V", most)
    return finish(figure, held.title, f"{at_idle(held)} No op-amp, no feedback.")


@on_paper()
def draw_idle(sheet: IdleSheet, chain_c: float, held: Held) -> Figure:
    """Idle current against temperature, the pair alone warm or the chain with it."""
    figure, (axes,) = new_figure("Idle current against temperature", 4.2)
    lost = []
    currents: list[float] = []
    for points, look, what in (
        (sheet.apart, _INK, f"pair alone, chain at {chain_c:g} °C"),
        (sheet.together, _SECOND, "pair and chain together"),
    ):
        good = [point for point in points if point.converged]
        lost += [f"{what} at {p.pair_c:g} °C" for p in points if not p.converged]
        currents += _idle_lines(axes, good, look, what)
    logarithmic(axes, "y", "idle current", "A", value_span(np.array(currents or [_LEAST_A])))
    linear(axes.xaxis, "temperature of the pair", "°C", 1.0)
    fixed = f"{as_it_comes(held)} No signal."
    if lost:
        fixed += f" No idle point: {'; '.join(lost)}."
    return finish(figure, held.title, fixed)


def _idle_lines(axes: Axes, points: Sequence[IdleAt], look: Look, what: str) -> list[float]:
    """Both halves where they differ by more than 2 %, else one line; return what is drawn."""
    at = np.array([point.pair_c for point in points])
    upper = np.maximum([point.upper_a for point in points], _LEAST_A)
    lower = np.maximum([point.lower_a for point in points], _LEAST_A)
    unlike = bool(np.any(np.abs(upper - lower) > 0.02 * np.maximum(upper, lower)))
    line(axes, at, upper, look, f"{what}{', upper half' if unlike else ''}", marked=True)
    if not unlike:
        return [*upper]
    thin = look._replace(marker="x")
    line(axes, at, lower, thin, f"{what}, lower half", marked=True)
    return [*upper, *lower]


# ---- courses ----


@on_paper()
def draw_burst(
    course: Supplied, rails: tuple[RailInBurst, RailInBurst], burst_s: float, held: Held
) -> Figure:
    """Output and rails in a burst at the clip point; below, either rail magnified."""
    figure, cells = new_figure("Rails in a burst at the clip point", 6.8, rows=3)
    whole = cells[0]
    whole.set_title("output (area) between its rails (lines)")
    whole.fill_between(
        course.time_s, course.output_v.low, course.output_v.high, color=SHADE, edgecolor=_INK.color
    )
    thin = _INK._replace(line="solid")
    sides = (("positive", course.positive_v.low), ("negative", course.negative_v.high))
    for near, rail, (name, volts) in zip(cells[1:], rails, sides, strict=True):
        line(whole, course.time_s, volts, thin)
        line(near, course.time_s, volts, thin)
        back = "" if rail.recovery_s is None else f", back in {quantity(rail.recovery_s, 's')}"
        near.set_title(
            f"{name} rail: {quantity(rail.idle_v, 'V')}, sags by "
            f"{quantity(rail.idle_v - rail.sagged_v, 'V')}{back}"
        )
    for axes, what in zip(cells, ("volts", "rail", "rail"), strict=True):
        linear(axes.yaxis, what, "V", rails[0].idle_v)
        linear(
            axes.xaxis,
            "time from the start of the burst" if axes is cells[-1] else "time",
            "s",
            burst_s,
        )
        axes.set_xlim(course.time_s[0], course.time_s[-1])
    fixed = (
        f"1 kHz for {quantity(burst_s, 's')} at the clip point. {as_it_comes(held)} "
        "Rails: what is nearest to zero in each millisecond. Sag: of the mean over a mains cycle; "
        "back: when 95 % of it are gone."
    )
    return finish(figure, held.title, fixed)


@on_paper()
def draw_squares(squares: Sequence[Square], sheet: SquareSheet, held: Held) -> Figure:
    """Output and drive node with a square wave: a period, and its rising edge magnified."""
    count = len(squares)
    figure, cells = new_figure("Square wave", 2.9 * count + 0.8, rows=count, columns=2)
    for k, (found, reading) in enumerate(zip(squares, sheet.readings, strict=True)):
        whole, edge = cells[2 * k : 2 * k + 2]
        for axes in (whole, edge):
            line(axes, found.time_s, found.drive_v, _SECOND, "drive node (op-amp's output)")
            line(axes, found.time_s, found.output_v, _INK, "output")
            linear(axes.yaxis, "volts", "V", float(np.max(np.abs(found.drive_v))))
        whole.set_xlim(0.9 * found.time_s[0], found.time_s[-1])
        linear(whole.xaxis, "time", "s", float(found.time_s[-1]))
        before, after = (times * reading.rise_s for times in _EDGE)
        edge.set_xlim(before, after)
        linear(edge.xaxis, "time from the edge", "s", after)
        whole.set_title(f"±{quantity(reading.peak_v, 'V')} asked for")
        edge.set_title(
            f"rise {quantity(reading.rise_s, 's')}, overshoot {100.0 * reading.overshoot:.1f} %"
        )
    fixed = f"{quantity(sheet.square_hz, 'Hz')}, {at_idle(held)}"
    return finish(figure, held.title, fixed)


@on_paper()
def draw_power_up(runs: Sequence[PoweredUp], held: Held) -> Figure:
    """Rails and output while the supply comes up, with equal and with unequal parts."""
    figure, (rails, output) = new_figure("Power-up without a signal", 5.4, rows=2)
    courses = [run.supplied for run in runs]
    for run, course, look in zip(runs, courses, looks(len(runs)), strict=True):
        what = "reservoirs and offset as they come" if run.unequal else "parts as drawn"
        line(rails, course.time_s, course.positive_v.low, look, what)
        line(rails, course.time_s, course.negative_v.high, look)
        line(output, course.time_s, larger(course.output_v), look)
    linear(rails.yaxis, "rails", "V", held.positive_v)
    most = max(float(np.max(np.abs(course.output_v))) for course in courses)
    linear(output.yaxis, "output", "V", most)
    end = max(_settled_s(course, most) for course in courses)
    for axes in (rails, output):
        linear(axes.xaxis, "time from switching on", "s", end)
        axes.set_xlim(0.0, end)
    fixed = (
        f"Load as drawn; rails reach +{quantity(held.positive_v, 'V')} and "
        f"{quantity(held.negative_v, 'V')}. As they come: one reservoir 20 % larger, one 20 % "
        "smaller, the op-amp's offset at its maximum."
    )
    return finish(figure, held.title, fixed)


def _settled_s(course: Supplied, output_v: float) -> float:
    """Twice the time after which rails and output stay near what they come to."""
    last = 0
    rails = (course.positive_v.low, course.negative_v.high)
    scaled = [(rail, float(np.max(np.abs(rail)))) for rail in rails]
    for y, most in (*scaled, (larger(course.output_v), output_v)):
        off = np.flatnonzero(np.abs(y - y[-1]) > _SETTLED * most)
        last = max(last, int(off[-1]) if off.size else 0)
    return float(min(max(2.0 * course.time_s[last], _LEAST_S), course.time_s[-1]))


def larger(course: Course) -> Signal:
    """Of lowest and highest, the one further from zero."""
    return np.where(np.abs(course.low) > np.abs(course.high), course.low, course.high)


# ---- all of them ----


def draw_pictures(
    bench: Bench, sheet: Sheet, folder: Path, progress: Progress | None = None
) -> tuple[Path, ...]:
    """Draw every picture the sections of a sheet allow, as SVG and PNG.

    The static curves need no section and are drawn wherever the design knows its pair (see
    `gain_curves`). A section that was not measured has no pictures: `idle` brings idle against
    temperature, `power` the burst, `distortion` both sweeps, the zero crossings and the spectra,
    `square` and `power_up` their traces. What a sheet holds is not measured again; traces and
    records, which no sheet keeps, are run here.

    Parameters
    ----------
    bench : Bench
    sheet : Sheet
        Measured on the same bench.
    folder : Path
        Made if it is missing. Pictures of ours in it are replaced, other files left alone.
    progress : callable, optional

    Returns
    -------
    tuple of Path
        The files written.

    Raises
    ------
    OutputError
        If the folder cannot be made or written to, or a file of other origin is in the way.
    """
    return _write(folder, {**_static(bench, sheet), **_moving(bench, sheet)}, progress)


Jobs = dict[str, Callable[[], Figure]]  # names of files, and what draws them


def _static(bench: Bench, sheet: Sheet) -> Jobs:
    held = held_of(bench)
    curves = gain_curves(bench)
    clips = (bench.rest.upper.clip, bench.rest.lower.clip)
    jobs: Jobs = {}
    if curves:
        jobs["transfer-curve"] = lambda: draw_transfer(curves[0], clips, held)
        jobs["small-signal-gain"] = lambda: draw_gain(curves, held)
    if (idle := sheet.idle) is not None and idle.apart:
        chain_c = bench.design.bias.temperature_c
        jobs["idle-against-temperature"] = lambda: draw_idle(idle, chain_c, held)
    return jobs


def _moving(bench: Bench, sheet: Sheet) -> Jobs:
    held = held_of(bench)
    jobs: Jobs = {}
    if (power := sheet.power) is not None:
        rails = (power.positive_burst, power.negative_burst)
        jobs["rails-in-burst"] = lambda: draw_burst(burst_course(bench), rails, power.burst_s, held)
    if (distortion := sheet.distortion) is not None:
        jobs["thd-against-level"] = lambda: draw_thd_level(distortion, held)
        jobs["thd-against-frequency"] = lambda: draw_thd_frequency(distortion, held)
        jobs["zero-crossing"] = lambda: draw_crossings(
            [zero_crossing(bench, frequency) for frequency in CROSSING_HZ], held
        )
        jobs["spectrum"] = lambda: draw_spectra(
            [line_spectrum(bench, level_db) for level_db in SPECTRUM_DB], held
        )
    if (square := sheet.square) is not None:
        jobs["square-wave"] = lambda: draw_squares(
            [square_course(bench, share) for share in SQUARE_SHARES], square, held
        )
    if sheet.power_up is not None:
        jobs["power-up"] = lambda: draw_power_up(
            [power_up_course(bench, unequal=unequal) for unequal in (False, True)], held
        )
    return jobs


def _write(folder: Path, jobs: Jobs, progress: Progress | None) -> tuple[Path, ...]:
    """Draw and write in turn; nothing is drawn if a file of other origin is in the way."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as failure:
        raise OutputError(f"the folder {folder} cannot be made: {failure.strerror}") from None
    for name in jobs:
        for path in targets(folder, name):
            refuse_foreign(path)
    written: list[Path] = []
    for count, (name, draw) in enumerate(jobs.items()):
        written += save_picture(draw(), folder, name)
        if progress is not None:
            progress((count + 1) / len(jobs))
    return tuple(written)
