"""Every preset idles, amplifies and survives every shipped recording.

The stretches here are the loudest two seconds and the tail's first second of each recording;
`python tests/test_presets.py` runs whole recordings at seven drives (about five minutes a core).
"""

import sys

import numpy as np
import pytest

from tonesim.circuit import lower
from tonesim.curve import clip_levels, idle_point
from tonesim.designfile import demo_audio_folder, list_presets, load_design
from tonesim.processor import Amplifier
from tonesim.signals import Signal
from tonesim.wav import open_recording

RATE = 48_000
RECORDINGS = ("quiet_picking", "strummed_chords", "low_riff")
DRIVES_DB = (-40.0, -20.0, 0.0, 20.0)
# The catch diodes take over beyond the rail; at 30 A they drop less than this [V].
BEYOND_RAIL_V = 2.5


def whole(name: str) -> Signal:
    with open_recording(demo_audio_folder() / f"{name}.wav") as source:
        assert source.info.sample_rate == RATE
        return np.concatenate([b[:, 0] for b in source.blocks(65_536)])


def stretch(name: str) -> Signal:
    x = whole(name)
    loudest = int(np.argmax(np.abs(x)))
    start = max(0, loudest - RATE // 2)
    last_loud = int(np.flatnonzero(np.abs(x) > 0.02 * np.max(np.abs(x)))[-1])
    tail = x[max(0, last_loud - RATE) : last_loud]
    return np.concatenate([x[start : start + 2 * RATE], tail])


@pytest.fixture(scope="module")
def stretches() -> dict[str, Signal]:
    return {name: stretch(name) for name in RECORDINGS}


def survives(stage: Amplifier, x: Signal, drive_db: float) -> None:
    """Run and check: finite, settled, inside the catch diodes, no energy out of nothing."""
    design = stage.design
    stage.reset()
    y = stage.process(x * design.input.full_scale_v * 10.0 ** (drive_db / 20.0))
    evidence = stage.evidence
    assert np.all(np.isfinite(y))
    assert evidence.unsettled_steps == 0
    assert evidence.lowest_v > design.supply.open_negative_v - BEYOND_RAIL_V
    assert evidence.highest_v < design.supply.open_positive_v + BEYOND_RAIL_V
    assert evidence.load_energy_j <= evidence.supply_energy_j


@pytest.mark.slow
@pytest.mark.parametrize("preset", list_presets())
def test_no_recording_at_any_drive_breaks_a_preset(preset, stretches):
    stage = Amplifier(load_design(preset))
    stage.prepare(RATE, 4096)
    for x in stretches.values():
        for drive_db in DRIVES_DB:
            survives(stage, x, drive_db)


@pytest.mark.parametrize("preset", list_presets())
def test_a_preset_idles_and_swings(preset):
    design = load_design(preset)
    circuit = lower(design)
    idle = idle_point(circuit)
    assert idle.converged
    assert abs(idle.output_v) < 0.05
    for clip in clip_levels(circuit, idle):
        assert abs(clip.level_v) > 1.5
        assert clip.residual_a < 1e-6
        assert clip.gains_v[clip.cause] > 0.0


@pytest.mark.parametrize("preset", list_presets())
def test_a_preset_says_what_it_is(preset):
    design = load_design(preset)
    assert len(design.title) > 10


def test_the_demo_trio_differs_in_bias_only():
    trio = [load_design(n).model_dump() for n in ("no-chain", "partial-chain", "full-chain")]
    for design in trio:
        del design["title"], design["bias"], design["notes"]
    assert trio[0] == trio[1] == trio[2]


def test_the_multiplier_preset_sits_at_the_optimum():
    # Oliver, Hewlett-Packard Journal, February 1971: 26 mV across the whole emitter resistance
    # (emitter resistor, the part's own, and base resistance over gain).
    design = load_design("vbe-multiplier")
    idle = idle_point(lower(design)).upper_current_a
    part = design.output.upper
    total_ohm = design.output.emitter_ohm + part.emitter_ohm + part.base_ohm / part.hfe
    assert idle * total_ohm == pytest.approx(0.026, rel=0.15)


if __name__ == "__main__":
    for preset in sys.argv[1:] or list_presets():
        stage = Amplifier(load_design(preset))
        stage.prepare(RATE, 4096)
        rescued = 0
        for name in RECORDINGS:
            for drive_db in range(-40, 21, 10):
                survives(stage, whole(name), drive_db)
                rescued += stage.evidence.rescued_steps
        print(f"{preset}: survives; {rescued} steps rescued, none unsettled", flush=True)
