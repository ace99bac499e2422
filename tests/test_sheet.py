"""The whole sheet: sections asked for, progress, plain values for JSON, every step settled."""

import dataclasses
import json
import math
from typing import Any

import pytest
from bench_pieces import class_b, reference_sheet
from conftest import make_design

from tonesim.check import check_design
from tonesim.designfile import design_key, list_presets, load_design
from tonesim.errors import SolverError, UsageError
from tonesim.sheet import SECTIONS, check_sections, measure_sheet


def test_sections_come_in_the_order_of_the_bench_and_all_by_default():
    assert check_sections(()) == tuple(SECTIONS)
    assert check_sections(("power-up", "idle", "clip", "idle")) == ("idle", "clip", "power-up")
    # Shares of the time a sheet takes.
    assert sum(SECTIONS.values()) == pytest.approx(1.0)
    assert min(SECTIONS.values()) > 0.0


@pytest.mark.parametrize("name", ["ide", "Idle", "", "power_up"])
def test_an_unknown_section_is_refused_with_all_that_are_known(name):
    with pytest.raises(UsageError) as refused:
        check_sections(("idle", name))
    assert repr(name) in str(refused.value)
    for known in SECTIONS:
        assert known in str(refused.value)
    with pytest.raises(UsageError):
        measure_sheet(make_design(), (name,))


def test_only_what_is_asked_for_is_measured():
    bench, sheet = measure_sheet(make_design(), ("square", "idle"))
    for name in SECTIONS:
        found = getattr(sheet, name.replace("-", "_"))
        assert (found is not None) == (name in ("square", "idle"))
    # Neither needs the clip point of a sine, which takes a search.
    assert "clip_point" not in bench.__dict__
    assert {*SECTIONS} & set(sheet.as_dict()) == {"square", "idle"}


def test_a_full_sheet_has_every_section_and_no_unsettled_step():
    bench, sheet, _ = reference_sheet()
    for name in SECTIONS:
        assert getattr(sheet, name.replace("-", "_")) is not None
    assert sheet.unsettled_steps == 0
    assert sheet.title == bench.design.title
    assert sheet.design_key_sha256 == design_key(bench.design)
    assert sheet.bench_ohm == 10.0
    assert sheet.rest == check_design(bench.design)


def test_progress_never_falls_and_ends_at_one():
    _, _, told = reference_sheet()
    assert told[0] == 0.0
    assert told[-1] == 1.0
    assert list(told) == sorted(told)
    # The long sections tell more than their beginning.
    assert len(told) > 2 * len(SECTIONS)


def test_progress_may_raise_to_stop():
    told: list[float] = []

    def stop(share: float) -> None:
        told.append(share)
        if len(told) == 3:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        measure_sheet(make_design(), ("idle", "clip", "gain", "square"), progress=stop)
    assert len(told) == 3


def test_the_same_design_gives_the_same_bits():
    sections = ("gain", "clip", "square")
    one, other = (measure_sheet(make_design(), sections)[1] for _ in range(2))
    assert one == other


def test_heat_alone_measures_the_power_it_needs():
    _, sheet = measure_sheet(class_b(), ("heat",), ambient_c=55.0)
    assert sheet.power is None
    assert sheet.heat is not None
    assert sheet.heat.ambient_c == 55.0
    # Boylestad & Nashelsky: Vcc^2 / (pi^2 RL) in each of a class B pair, see test_power.py.
    worst = 24.0**2 / (math.pi**2 * 8.0)
    assert sheet.heat.devices[0].worst_w == pytest.approx(worst, rel=0.01)


def test_a_step_that_does_not_settle_anywhere_is_told(monkeypatch):
    # One in every run of the compiled loop, so that a run left out would show.
    from tonesim import probe as module
    from tonesim.kernel import amplifier as loop

    real, runs = module.advance, []

    def unsettled(x: Any, y: Any, state: Any, evidence: Any, p: Any) -> None:
        real(x, y, state, evidence, p)
        evidence[loop.UNSETTLED] += 1
        runs.append(1)

    monkeypatch.setattr(module, "advance", unsettled)
    _, sheet = measure_sheet(make_design(), ("gain", "clip", "power", "heat", "square"))
    assert sheet.unsettled_steps == len(runs)


def test_a_design_that_cannot_idle_is_refused_before_anything_is_told():
    told: list[float] = []
    with pytest.raises(SolverError, match="no idle point"):
        measure_sheet(make_design({"supply.current_limit_a": 4e-3}), progress=told.append)
    assert told == []


# ---- plain values ----


def walk(value: object, path: str = "") -> list[tuple[str, object]]:
    if isinstance(value, dict):
        return [leaf for key, part in value.items() for leaf in walk(part, f"{path}.{key}")]
    if isinstance(value, list):
        return [leaf for k, part in enumerate(value) for leaf in walk(part, f"{path}[{k}]")]
    return [(path, value)]


def test_json_is_finite_and_parses_to_the_same():
    sheet = reference_sheet()[1]
    plain = sheet.as_dict()
    text = json.dumps(plain, allow_nan=False)  # the standard's own check (RFC 8259: no NaN)
    assert json.loads(text) == plain
    kinds = {type(value) for _, value in walk(plain)}
    assert all(issubclass(kind, (str, int, float, bool, type(None))) for kind in kinds)
    for path, value in walk(plain):
        if isinstance(value, float):
            assert math.isfinite(value), path


def test_json_holds_what_is_derived_too():
    sheet = reference_sheet()[1]
    plain = sheet.as_dict()
    assert sheet.power is not None
    assert sheet.distortion is not None
    assert plain["power"]["clip_point"]["efficiency"] == sheet.power.clip_point.efficiency
    assert plain["power"]["worst"]["hotter_w"] == sheet.power.worst.hotter_w
    assert plain["distortion"]["by_level"][0]["harmonics"]["thd_percent"] == (
        sheet.distortion.by_level[0].harmonics.thd_percent
    )
    assert plain["clip"]["upper"]["limits"][0]["in_hand"] > 0.0
    # Every field that was measured is there.
    fields = {field.name for field in dataclasses.fields(sheet)}
    assert {name for name in fields if getattr(sheet, name) is not None} == set(plain)


# ---- presets ----


@pytest.mark.slow
@pytest.mark.parametrize("preset", list_presets())
def test_every_step_of_every_preset_settles(preset):
    sections = ("gain", "clip", "power", "square", "power-up")
    _, sheet = measure_sheet(load_design(preset), sections)
    assert sheet.unsettled_steps == 0
    assert sheet.power is not None
    assert sheet.power.clip_point.steady
    json.dumps(sheet.as_dict(), allow_nan=False)
