"""Designs the bench is tried on, and what was measured on them, once a run. All values invented."""

import functools
from typing import Any

from conftest import make_design
from test_facts_of_the_trade import stage

from tonesim.bench import Bench
from tonesim.catalogue import OpAmp, load_catalogue
from tonesim.design import Design
from tonesim.power import PowerSheet, measure_power
from tonesim.sheet import Sheet, measure_sheet

SILICON = "1N4148"


def opamp(name: str, **changes: Any) -> OpAmp:
    """A part of the catalogue with other values."""
    return load_catalogue().opamp(name).model_copy(update=changes)


def strong(**changes: Any) -> OpAmp:
    """An op-amp in nobody's way: next to no output resistance, much bandwidth, any supply."""
    values: dict[str, Any] = {
        "gain_bandwidth_hz": 100e6,
        "dc_gain": 1e7,
        "slew_v_per_s": 1e9,
        "swing_10k_positive_v": 14.0,
        "swing_10k_negative_v": -14.0,
        "swing_2k_positive_v": 13.999,
        "swing_2k_negative_v": -13.999,
        "source_limit_a": 0.2,
        "sink_limit_a": 0.2,
        "supply_max_v": 200.0,
        "quiescent_a": 1e-3,
    }
    return opamp("NE5532", **{**values, **changes})


def class_b(rail_v: float = 24.0, ohm: float = 8.0, **changes: Any) -> Design:
    """Darlingtons without chain and emitter resistors, the op-amp on higher rails of its own."""
    own = rail_v + 6.0
    return make_design(
        {
            "bias": {},
            "driver": {
                "part": strong(),
                "feedback_ohm": "33k",
                "ground_leg_ohm": "1k5",
                "positive_v": own,
                "negative_v": -own,
            },
            "output": {"upper": "TIP142", "lower": "TIP147", "emitter_ohm": 0.0},
            "supply": {"kind": "bench", "positive_v": rail_v},
            "load": {"ohm": ohm},
            **changes,
        }
    )


def class_ab(**changes: Any) -> Design:
    """Darlingtons with a full chain fed well, on stiff rails; both halves alike."""
    two = [SILICON, SILICON]
    return make_design(
        {
            "driver": {"part": strong(), "feedback_ohm": "33k", "ground_leg_ohm": "1k5"},
            "bias": {"feed_ohm": 1800.0, "upper": two, "lower": two},
            "output.emitter_ohm": 0.47,
            **changes,
        }
    )


@functools.cache
def class_b_bench() -> Bench:
    return Bench(class_b())


@functools.cache
def class_b_power() -> PowerSheet:
    return measure_power(class_b_bench())


@functools.cache
def class_ab_bench() -> Bench:
    return Bench(class_ab())


@functools.cache
def reference_bench(chain: str) -> Bench:
    """The circuit of `test_facts_of_the_trade`, gain 1 + 100k/4k7 into 10 ohm from 15 V."""
    return Bench(stage(chain))


@functools.cache
def reference_sheet() -> tuple[Bench, Sheet, tuple[float, ...]]:
    """All sections of the same with three drops, and the progress told meanwhile."""
    told: list[float] = []
    bench, sheet = measure_sheet(stage("three"), progress=told.append)
    return bench, sheet, tuple(told)
