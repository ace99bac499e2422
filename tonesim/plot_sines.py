"""Pictures of sines: zero crossing, distortion against level and frequency, spectra."""

from collections.abc import Sequence

import numpy as np

from tonesim.distortion import DistortionPoint, DistortionSheet
from tonesim.paper import (
    LOOKS,
    Figure,
    finish,
    level,
    line,
    linear,
    logarithmic,
    looks,
    mark,
    minus,
    new_figure,
    on_paper,
    plain,
    power_scale,
    quantity,
    spikes,
    value_span,
)
from tonesim.pictures import SPECTRUM_HZ, Crossing, Held, Spectrum, as_it_comes, at_idle
from tonesim.signals import Signal

_INK, _SECOND, _THIRD, _FOURTH = LOOKS
_LEAST_PERCENT = 1e-9  # distortion below this is not drawn
_LOWEST_DB = -150.0
_MOST_TIMES = 100_000.0  # beyond it a residual shows the steps of the tables


@on_paper()
def draw_crossings(crossings: Sequence[Crossing], held: Held) -> Figure:
    """One cycle of each sine, and its residual magnified."""
    figure, rows = new_figure("Zero crossing and residual", 7.4, rows=len(crossings))
    for axes, found in zip(rows, crossings, strict=True):
        high, rest = (float(np.max(np.abs(y))) for y in (found.output_v, found.residual_v))
        times = residual_scale(high, rest)
        line(axes, found.time_s, found.output_v, _SECOND, "output")
        line(axes, found.time_s, times * found.residual_v, _INK, "residual, magnified")
        axes.set_title(
            f"{quantity(found.frequency_hz, 'Hz')}: residual × {plain(times)}, "
            f"THD {plain(found.thd_percent)} %"
        )
        axes.set_xlim(found.time_s[0], found.time_s[-1])
        linear(axes.xaxis, "time", "s", float(found.time_s[-1]))
        linear(axes.yaxis, "output", "V", high)
    fixed = (
        f"Sines {level(crossings[0].level_db)} from the clip point; residual: output without "
        f"its fundamental and mean, × {plain(_MOST_TIMES, 6)} at most. {at_idle(held)}"
    )
    return finish(figure, held.title, fixed)


def residual_scale(high_v: float, residual_v: float) -> float:
    """Factor 1, 2 or 5 times a power of ten that shows a residual at about half the height.

    100 000 at most, where the computation's own steps would begin to show.
    """
    wanted = 0.55 * high_v / max(residual_v, 0.55 * high_v / _MOST_TIMES)
    decade = 10.0 ** np.floor(np.log10(wanted))
    return float(max(m * decade for m in (1.0, 2.0, 5.0) if m * decade <= wanted * (1.0 + 1e-9)))


@on_paper()
def draw_thd_level(sheet: DistortionSheet, held: Held) -> Figure:
    """Distortion against level, at the output in volts below and in watts above."""
    points = list(sheet.by_level)
    figure, (axes,) = new_figure("Distortion against level", 4.4)
    x = np.array([point.output_v for point in points])
    thd, noise = _percent(points), _percent(points, noise=True)
    line(axes, x, thd, _INK, "harmonics (THD)", marked=True)
    line(axes, x, noise, _SECOND, "harmonics, hum and residue (THD+N)")
    at = float(np.interp(0.0, [point.level_db for point in points], x))
    axes.axvline(at, color=_THIRD.color, linestyle=_THIRD.line, label="clip point")
    logarithmic(axes, "y", "distortion", "%", value_span(thd, noise))
    logarithmic(axes, "x", "output, rms", "V", value_span(x))
    power_scale(axes, held.ohm)
    fixed = (
        f"{quantity(sheet.tone_hz, 'Hz')}, harmonics to 80 kHz. {as_it_comes(held)} THD is a share "
        "of the fundamental, THD+N of the whole."
    )
    return finish(figure, held.title, fixed + _doubts(points, sheet.floor_db))


@on_paper()
def draw_thd_frequency(sheet: DistortionSheet, held: Held) -> Figure:
    """Distortion against frequency, a line for each level."""
    figure, (axes,) = new_figure("Distortion against frequency", 4.4)
    drawn = []
    for points, look in zip(sheet.by_frequency, looks(len(sheet.by_frequency)), strict=True):
        middle = min(points, key=lambda point: abs(np.log(point.frequency_hz / 1000.0)))
        x = np.array([point.frequency_hz for point in points])
        drawn.append(_percent(points))
        label = f"{level(middle.level_db)} from the clip point ({quantity(middle.output_w, 'W')})"
        line(axes, x, drawn[-1], look, label, marked=True)
    logarithmic(axes, "y", "distortion", "%", value_span(*drawn))
    logarithmic(axes, "x", "frequency", "Hz", value_span(x))
    every = [point for row in sheet.by_frequency for point in row]
    fixed = (
        "Harmonics to 80 kHz, the tenth at least, as a share of the fundamental; constant input. "
        f"{as_it_comes(held)}"
    )
    return finish(figure, held.title, fixed + _doubts(every, sheet.floor_db))


def _percent(points: Sequence[DistortionPoint], *, noise: bool = False) -> Signal:
    found = [100.0 * (p.harmonics.thd_n if noise else p.harmonics.thd_f) for p in points]
    return np.maximum(found, _LEAST_PERCENT)


def _doubts(points: Sequence[DistortionPoint], floor_db: float) -> str:
    """What the figures stand on, and how many of them had not settled."""
    told = f" Beside harmonics the computation leaves {minus(f'{floor_db:.0f}')} dB of a full sine."
    count = sum(not point.steady for point in points)
    return told + (f" {count} of {len(points)} points were not steady." if count else "")


@on_paper()
def draw_spectra(spectra: Sequence[Spectrum], held: Held) -> Figure:
    """Lines relative to the fundamental, harmonics marked: even hollow, odd filled."""
    figure, rows = new_figure("Spectrum of a 1 kHz sine", 6.6, rows=len(spectra))
    for axes, found in zip(rows, spectra, strict=True):
        seen = found.relative_db > _LOWEST_DB
        spikes(axes, found.frequency_hz[seen], found.relative_db[seen], _LOWEST_DB, _INK)
        odd = np.rint(found.harmonics_hz / found.tone_hz) % 2 == 1
        seen = found.harmonics_db > _LOWEST_DB
        for chosen, look, name in (
            (~odd, _THIRD, "even harmonics"),
            (odd, _SECOND, "odd harmonics"),
        ):
            x, y = (each[chosen & seen] for each in (found.harmonics_hz, found.harmonics_db))
            mark(axes, x, y, look, name, filled=look is _SECOND)
        axes.axhline(
            found.residue_db,
            color=_FOURTH.color,
            linestyle=_FOURTH.line,
            label="residue, all lines together",
        )
        axes.set(xlim=(0.0, SPECTRUM_HZ), ylim=(_LOWEST_DB, 8.0))
        axes.set_yticks(np.arange(_LOWEST_DB, 1.0, 30.0))
        axes.set_title(
            f"{level(found.level_db)} from the clip point, {quantity(found.output_v, 'V')} rms; "
            f"residue {minus(f'{found.residue_db:.0f}')} dB"
        )
        axes.set_ylabel("level (dB, fundamental 0)")
        linear(axes.xaxis, "frequency", "Hz", SPECTRUM_HZ)
    fixed = (
        f"{as_it_comes(held)} Residue: all lines to 80 kHz that are neither harmonic nor hum, "
        f"together. Nothing is drawn below {level(_LOWEST_DB)}."
    )
    return finish(figure, held.title, fixed)
