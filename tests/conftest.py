"""Shared by all tests: a seeded generator and the smallest valid design."""

from collections.abc import Mapping
from typing import Any

import numpy as np
import pytest
from hypothesis import settings

from tonesim.design import Design
from tonesim.designfile import build_design

pytest.register_assert_rewrite("processor_laws")
settings.register_profile("seeded", derandomize=True, deadline=None)
settings.load_profile("seeded")


@pytest.fixture(scope="session", autouse=True)
def compiled() -> None:
    """Compile once, so that no test depends on what ran before it."""
    from tonesim.processor import Amplifier

    Amplifier(make_design()).prepare(48_000, 64)


@pytest.fixture
def rng() -> np.random.Generator:
    return np.random.default_rng(20260)


def make_design(changes: Mapping[str, Any] | None = None) -> Design:
    """A small valid design; `changes` are dotted keys (invented values)."""
    base: dict[str, Any] = {
        "title": "bench piece",
        "driver": {"part": "TL072", "feedback_ohm": 33e3, "ground_leg_ohm": 1500.0},
        "bias": {"feed_ohm": 3900.0, "upper": ["1N4148"], "lower": ["1N4148"]},
        "output": {"upper": "TIP122", "lower": "TIP127", "emitter_ohm": 0.22},
        "supply": {"kind": "bench", "positive_v": 15.0},
        "load": {"ohm": 8.0},
    }
    for key, value in (changes or {}).items():
        section, _, name = key.partition(".")
        if not name:
            base[section] = value
        else:
            base.setdefault(section, {})[name] = value
    return build_design(base)
