"""Speed, as ratios in one run: `python tests/bench_speed.py`. Not collected by pytest.

Prints, for every preset, the real-time factor of the whole stage and the share of each link of
the chain; then what a surface and a bench sheet cost, and how the stage compares with a general
integrator.
One core, 48 kHz, real time = 1. Machines are noisy: compare rows of one run only.
"""

import argparse
import time
from collections.abc import Callable

import numpy as np

from tonesim.cabinet import Cabinet, shape_response
from tonesim.circuit import lower
from tonesim.curve import build_surface, grid_for
from tonesim.designfile import demo_audio_folder, list_presets, load_design
from tonesim.ear import Listening
from tonesim.front import discretise_front
from tonesim.kernel.front import SIZE, advance_front
from tonesim.masking import MaskingMeter
from tonesim.oversample import Oversampler
from tonesim.processor import Amplifier
from tonesim.sheet import measure_sheet
from tonesim.wav import open_recording

RATE, BLOCK = 48_000, 1024


def recording(seconds: float) -> np.ndarray:
    """A stretch of the shipped strummed chords, full scale 1."""
    with open_recording(demo_audio_folder() / "strummed_chords.wav") as source:
        x = np.concatenate([b[:, 0] for b in source.blocks(65_536)])
    x = x[: round(seconds * RATE)]
    return np.ascontiguousarray(x)


def seconds_for(work: Callable[[], object], repeats: int = 3) -> float:
    """Best of a few runs, in seconds."""
    best = np.inf
    for _ in range(repeats):
        start = time.perf_counter()
        work()
        best = min(best, time.perf_counter() - start)
    return float(best)


def blocks(x: np.ndarray, process: Callable[[np.ndarray], object]) -> Callable[[], None]:
    def work() -> None:
        for k in range(0, x.size, BLOCK):
            process(x[k : k + BLOCK])

    return work


def preset_row(name: str, x: np.ndarray) -> str:
    design = load_design(name)
    stage = Amplifier(design)
    stage.prepare(RATE, BLOCK)
    volts = x * design.input.full_scale_v
    stage.process(volts[:BLOCK])
    stage.reset()
    whole = seconds_for(blocks(volts, stage.process))
    evidence = stage.evidence
    filters = Oversampler(stage.factor, BLOCK)
    fast, slow = np.zeros(BLOCK * stage.factor), np.zeros(BLOCK)

    def up_and_down(b: np.ndarray) -> None:
        n = b.size * stage.factor
        filters.up(b, fast[:n])
        filters.down(fast[:n], slow[: b.size])

    oversampling = seconds_for(blocks(volts, up_and_down))
    text = f"{name:<28}{x.size / RATE / whole:>8.1f}{100 * oversampling / whole:>9.1f} %"
    if design.cabinet is not None and design.cabinet.part is not None:
        cabinet = Cabinet(*shape_response(design.cabinet.part, RATE), RATE)
        cabinet.prepare(RATE, BLOCK)
        text += f"{100 * seconds_for(blocks(volts, cabinet.process)) / whole:>9.1f} %"
    else:
        text += f"{'-':>11}"
    nanoseconds = 1e9 * (whole - oversampling) / (x.size * stage.factor)
    text += f"{nanoseconds:>10.0f}{evidence.iterations / evidence.steps:>8.2f}"
    return text + f"{evidence.rescued_steps:>9d}{evidence.unsettled_steps:>10d}"


def surface_row(name: str) -> str:
    circuit = lower(load_design(name))
    grid = grid_for(circuit)
    build_surface(circuit.upper, grid)
    other = circuit.upper._replace(r_emitter=circuit.upper.r_emitter + 1e-6)
    start = time.perf_counter()
    table, _, _ = build_surface(other, grid)
    took = time.perf_counter() - start
    return f"{name:<28}{1e3 * took:>8.0f} ms{table.nbytes / 1e6:>8.1f} MB"


def front_row(name: str, x: np.ndarray) -> str:
    design = load_design(name)
    front = lower(design).front
    assert front is not None
    factor = 8
    params, state = discretise_front(front, 1.0 / (RATE * factor)), np.zeros(SIZE)
    fast = np.repeat(x * design.input.full_scale_v, factor)
    out = np.empty_like(fast)
    advance_front(fast[:BLOCK], out[:BLOCK], state, params)
    took = seconds_for(lambda: advance_front(fast, out, state, params))
    return f"{name:<28}{1e9 * took / fast.size:>8.1f} ns/step"


def ear_row(name: str, x: np.ndarray, rate: int) -> str:
    """Both models, and the same recording heard again at another level."""
    test = x + 0.001 * np.sign(x)
    meters = []

    def listen() -> None:
        meters[:] = [MaskingMeter(rate, Listening(90.0, 30.0), keep_bands=True)]
        for k in range(0, x.size, BLOCK):
            meters[0].add(x[k : k + BLOCK], test[k : k + BLOCK])
        meters[0].finish()

    once = seconds_for(listen)
    again = seconds_for(lambda: meters[0].replay(-10.0))
    seconds = x.size / rate
    return f"{name:<28}{seconds / once:>8.1f}{seconds / again:>10.1f}"


def against_integrator(name: str) -> str:
    """Real-time factor of the stage divided by that of IDA at comparable accuracy."""
    from conftest import make_design
    from reference import integrate

    design = make_design({"load": {"part": "12-inch-8-ohm", "zobel_ohm": 10, "zobel_f": 1e-7}})
    circuit, seconds, hertz = lower(design), 0.01, 1000.0
    times = np.arange(round(seconds * RATE * 8) + 1) / (RATE * 8)
    integrate(circuit, 0.3, hertz, times[:200], rtol=1e-6)
    ida = seconds_for(lambda: integrate(circuit, 0.3, hertz, times, rtol=1e-6), repeats=1)
    stage = Amplifier(design)
    stage.prepare(RATE, BLOCK)
    x = 0.3 * np.sin(2.0 * np.pi * hertz * np.arange(RATE) / RATE)
    ours = seconds_for(blocks(x, stage.process))
    return f"{name:<28}{1.0 / ours:>8.1f}{seconds / ida:>10.4f}{ida / seconds / ours:>10.0f}"


def reference_seconds(x: np.ndarray) -> float:
    """What one second of the recording costs through the full chain: the yardstick of a sheet."""
    design = load_design("full-chain")
    stage = Amplifier(design)
    stage.prepare(RATE, BLOCK)
    volts = x * design.input.full_scale_v
    return seconds_for(blocks(volts, stage.process)) / (x.size / RATE)


def sheet_row(name: str, yardstick_s: float) -> str:
    """A full bench sheet, on all cores: seconds, and how much playing they stand for."""
    design = load_design(name)
    start = time.perf_counter()
    _, sheet = measure_sheet(design)
    took = time.perf_counter() - start
    return f"{name:<28}{took:>8.1f} s{took / yardstick_s:>10.0f} s{sheet.unsettled_steps:>10d}"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--seconds", type=float, default=8.0, help="stretch of recording to run")
    parser.add_argument("presets", nargs="*", help="presets to run (all)")
    options = parser.parse_args()
    x = recording(options.seconds)
    print(f"{x.size / RATE:.1f} s of strummed chords at {RATE} Hz, one core, best of three\n")
    print(f"{'preset':<28}{'x real':>8}{'filters':>11}{'cabinet':>11}{'ns/step':>10}", end="")
    print(f"{'iter':>8}{'rescued':>9}{'unsettled':>10}")
    for name in options.presets or list_presets():
        print(preset_row(name, x), flush=True)
    print(f"\n{'surface of one half':<28}{'build':>11}{'size':>11}")
    for name in ("no-chain", "full-chain", "vbe-multiplier", "single-pair-current-limit"):
        print(surface_row(name), flush=True)
    print(f"\n{'front end alone':<28}")
    print(front_row("tone-controls", x), flush=True)
    print(f"\n{'both models of the ear':<28}{'x real':>8}{'replay':>10}")
    for rate in (48_000, 44_100, 96_000):
        print(ear_row(f"recording at {rate} Hz", x, rate), flush=True)
    yardstick = reference_seconds(x)
    print(f"\n{'full bench sheet':<28}{'takes':>10}{'of playing':>12}{'unsettled':>10}")
    for name in ("single-pair-current-limit", "no-chain", "full-chain"):
        print(sheet_row(name, yardstick), flush=True)
    print(f"\n{'1 kHz sine, loudspeaker':<28}{'x real':>8}{'IDA':>10}{'ratio':>10}")
    print(against_integrator("partial chain"))


if __name__ == "__main__":
    main()
