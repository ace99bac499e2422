"""Measured figures against computed ones: reading, explaining, telling.

"Measured" figures are computed from a design altered by a known tolerance, in files written
here; all values are invented. Published forms stand beside their checks.
"""

import csv
import io
import json
import math
import re
from functools import cache
from pathlib import Path

import pytest
from click.testing import CliRunner
from conftest import make_design
from hypothesis import given, settings
from hypothesis import strategies as st

from tonesim.against import measure_against
from tonesim.bench import RECORD_S, Bench, distortion_of
from tonesim.check import check_design
from tonesim.circuit import lower
from tonesim.cli import commands
from tonesim.curve import static_point
from tonesim.design import Design
from tonesim.designfile import load_design, replace
from tonesim.errors import DesignError, UsageError
from tonesim.explanation import WITHIN, Comparison, Explanation, Target, compare, explain
from tonesim.measured import judge_table
from tonesim.probe import Probe
from tonesim.readings import FIGURES, FigureReading, Readings, read_readings
from tonesim.sheet import check_sections, measure_sheet
from tonesim.stage import build_stage
from tonesim.tables import tables
from tonesim.units import thermal_voltage
from tonesim.variants import output_at_drive, small_gain
from tonesim.windows import Tolerance, feedback, hfe, offset, shown_change, supply, vbe

CHAIN = {"bias.upper": ["1N4148", "BAT85", "BAT85"], "bias.lower": ["1N4148", "BAT85", "BAT85"]}
VBE_12_MV = {"output.upper_vbe_shift_v": 0.012, "output.lower_vbe_shift_v": 0.012}


@cache
def bench() -> Bench:
    """The smallest design with a chain that holds the pair on."""
    return Bench(make_design(CHAIN))


def figures(on: Bench, **values: float) -> dict[str, Comparison]:
    """Compare figures with a design, by their names."""
    given_ = tuple(FigureReading(name, value, 2) for name, value in values.items())
    found = measure_against(on, Readings("mine.csv", "figures", figures=given_))
    return dict(zip(values, found.comparisons, strict=True))


def best(found: Comparison) -> Explanation:
    """Best explanation, which must lie within its window and meet the measured figure."""
    first = found.explanations[0]
    assert first.within
    assert first.change is not None
    assert first.least <= first.change <= first.most
    assert first.reached == pytest.approx(found.measured, rel=1e-3)  # a 1e-4th of a window
    return first


def write(folder: Path, text: str, name: str = "mine.csv") -> Path:
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path


# Figures


def test_equal_figures_deviate_by_nothing_and_need_no_explanation():
    rest = check_design(bench().design)
    found = figures(
        bench(),
        upper_idle_a=rest.upper.idle_a,
        draw_negative_a=rest.lower.draw_a,
        upper_chain_v=rest.upper.chain_v,
        offset_v=rest.output_offset_v,
        clip_positive_v=rest.upper.clip.level_v,
        clip_negative_v=rest.lower.clip.level_v,
        rail_negative_v=-rest.lower.rail_v,
        output_at_clip_v=bench().clip_point.output_v,
    )
    for each in found.values():
        assert each.agrees
        assert each.explanations == ()
        assert each.deviation == pytest.approx(0.0, abs=1e-9)  # of the static solver's brackets
        assert "agrees" in each.verdict


def test_idle_currents_of_a_pair_with_more_vbe_are_explained_by_just_that():
    rest = check_design(replace(bench().design, **VBE_12_MV))
    found = figures(
        bench(),
        upper_idle_a=rest.upper.idle_a,
        lower_idle_a=rest.lower.idle_a,
        draw_positive_a=rest.upper.draw_a,
    )
    for each in found.values():
        assert not each.agrees
        assert best(each).part == "VBE on both devices"
        assert best(each).change == pytest.approx(0.012, abs=2e-5)
        assert each.verdict.startswith(
            "+12 mV of VBE on both devices, within the ±30 mV parts come with"
        )


def test_idle_current_of_a_rigid_pair_falls_a_decade_for_60_millivolts_of_vbe():
    # IC = IS exp(VBE/VT), 60 mV a decade: Sedra and Smith, Microelectronic Circuits, the BJT.
    ideal = {"emitter_ohm": 0, "base_ohm": 0, "hfe": 1e7, "knee_a": 1e6}
    design = make_design(
        {
            "output": {"upper": "TIP41C", "lower": "TIP42C", "emitter_ohm": 0.0},
            "bias": {"feed_ohm": 3900.0, "upper": ["1N4148"], "lower": ["1N4148"]},
        }
    )
    parts = {f"output.{side}.{key}": v for side in ("upper", "lower") for key, v in ideal.items()}
    rigid = Bench(replace(design, **parts))
    idle = rigid.rest.upper.idle_a
    v_t = thermal_voltage(25.0)
    within = figures(rigid, upper_idle_a=idle / 2.5)["upper_idle_a"]
    # The drive node does not move and no base current loads the chain: 0.2 % covers hFE 1e7.
    assert best(within).change == pytest.approx(v_t * math.log(2.5), rel=2e-3)
    decade = figures(rigid, upper_idle_a=idle / 10.0)["upper_idle_a"]
    assert decade.explanations == ()
    assert decade.nearest is not None
    assert decade.nearest.change == pytest.approx(v_t * math.log(10.0), rel=2e-3)
    assert decade.nearest.change == pytest.approx(0.060, abs=1e-3)


@settings(max_examples=20)  # each solves a dozen idle points
@given(st.floats(-4.9, 4.9).filter(lambda x: abs(x) > 1.2))
def test_gain_is_explained_by_the_ratio_of_the_feedback_resistors(percent):
    # Gain of the non-inverting amplifier, 1 + Rf/Rg (Sedra and Smith, op-amps).
    gain = 1.0 + 33e3 * (1.0 + percent / 100.0) / 1500.0
    found = figures(bench(), gain=gain)["gain"]
    # The form holds for an infinite op-amp; 2e5 of gain and 4 MHz make 0.012 % of it.
    assert best(found).change == pytest.approx(percent, abs=0.02)
    assert best(found).part.startswith("feedback_ohm")
    assert found.deviation_db == pytest.approx(20.0 * math.log10(gain / 23.0), abs=2e-3)


def test_gain_in_decibels_is_explained_alike():
    gain_db = 20.0 * math.log10(1.0 + 33e3 * 1.02 / 1500.0)
    found = figures(bench(), gain_db=gain_db)["gain_db"]
    assert best(found).change == pytest.approx(2.0, abs=0.02)
    assert found.deviation_percent is None
    assert found.deviation_db == found.deviation


def test_gain_of_the_closed_loop_falls_with_the_op_amps_own():
    # A / (1 + A beta) with A = GBW / j f: Sedra and Smith, frequency response of closed loops.
    circuit = lower(make_design({"driver.part": "LM358"}))
    corner = circuit.driver.omega / (2.0 * math.pi) * circuit.driver.beta
    there = small_gain(circuit, corner)
    assert there == pytest.approx(23.0 / math.sqrt(2.0), rel=1e-3)  # DC gain 1e5 over 23


def test_offset_is_the_op_amps_up_to_the_maximum_of_its_sheet():
    own = bench().design.driver
    rest = check_design(replace(bench().design, **{"driver.offset_v": -0.004}))
    found = figures(bench(), offset_v=rest.output_offset_v)["offset_v"]
    assert best(found).change == pytest.approx(-0.004, abs=1e-6)
    assert rest.output_offset_v == pytest.approx(-0.004 * own.gain, rel=1e-3)
    far = figures(bench(), offset_v=1.5 * own.part.offset_max_v * own.gain)["offset_v"]
    assert far.explanations == ()
    assert "look for a fault (+15 mV of op-amp input offset, beyond" in far.verdict


def test_a_starved_clip_level_is_explained_by_current_gain():
    design = make_design({**CHAIN, "bias.feed_ohm": 12e3})
    starved = Bench(design)
    assert starved.rest.upper.clip.cause == "base starvation"
    weak = check_design(replace(design, **{"output.upper_hfe_factor": 0.7}))
    found = figures(starved, clip_positive_v=weak.upper.clip.level_v)["clip_positive_v"]
    assert best(found).part == "hFE of the upper device"
    assert best(found).change == pytest.approx(0.7, abs=2e-3)
    assert "×0.7 hFE of the upper device, within the ×0.5 to ×1.6" in found.verdict


def test_rails_and_clip_level_of_a_battery_are_explained_by_its_charge():
    battery = {"kind": "battery", "positive_v": 12.6, "internal_ohm": 0.15}
    flat = {"kind": "battery", "positive_v": 12.6 * 0.93, "internal_ohm": 0.15}
    charged, empty = Bench(make_design({"supply": battery})), Bench(make_design({"supply": flat}))
    found = figures(
        charged,
        rail_positive_v=empty.rest.upper.rail_v,
        rail_negative_v=-empty.rest.lower.rail_v,
        output_at_clip_v=empty.clip_point.output_v,
    )
    for name in ("rail_positive_v", "rail_negative_v"):
        assert best(found[name]).part == "the batteries' voltage"
        assert best(found[name]).change == pytest.approx(-7.0, abs=0.01)
    # A clip level that the op-amp's swing sets may as well be the op-amp's.
    parts = {each.part: each for each in found["output_at_clip_v"].explanations}
    assert set(parts) == {"op-amp swing", "the batteries' voltage"}
    # Sag is carried over in proportion: a tenth of the change.
    assert parts["the batteries' voltage"].change == pytest.approx(-7.0, abs=0.7)


def test_ripple_is_explained_by_the_reservoirs():
    transformer = {
        "kind": "transformer",
        "winding_v": 10,
        "winding_ohm": 0.5,
        "reservoir_f": 2200e-6,
    }
    whole = Bench(make_design({"supply": transformer}))
    aged = make_design({"supply": {**transformer, "reservoir_f": 0.85 * 2200e-6}})
    ripple = check_design(aged).upper.rail_ripple_v
    found = figures(whole, ripple_positive_v=ripple)["ripple_positive_v"]
    assert best(found).part == "the reservoirs"
    assert best(found).change == pytest.approx(-15.0, abs=0.1)


def test_what_is_beyond_every_tolerance_is_called_a_fault():
    found = figures(bench(), upper_idle_a=3.0, rail_positive_v=3.0, clip_positive_v=1.0)
    for each in found.values():
        assert each.explanations == ()
        assert "no single tolerance explains it: look for a fault" in each.verdict
    # A bench supply's meter may be 2 % off; 3 V is not within three times that.
    assert found["rail_positive_v"].nearest is not None
    assert found["rail_positive_v"].nearest.change is None
    assert found["rail_positive_v"].nearest.reached == pytest.approx(15.0 * 0.94)
    assert found["rail_positive_v"].verdict.endswith(
        "(tried the supply's voltage, to 3 times the ±2 % its meter has, which gives 14.1 V)"
    )


def test_every_known_figure_is_computed():
    # All of them far off, so that each is also looked at by its tolerances.
    values = {name: 0.5 * (known.sign or 1) for name, known in FIGURES.items()}
    found = figures(bench(), **values)
    for name, each in found.items():
        assert each.computed is not None
        assert not each.agrees
        # A bench supply has neither reservoirs nor ripple.
        assert bool(each.explanations or each.nearest) != name.startswith("ripple")


def test_the_second_best_stands_beside_the_best_only_within_its_window():
    def model(tolerance: Tolerance | None, share: float) -> float:
        return 10.0 * (1.0 + 0.1 * share) if tolerance is not None else 10.0

    target = Target("x", "V", 10.5, 10.0, (0.0, 0.0), model, [vbe(), hfe(), feedback()])
    found = compare(target)
    assert [each.share for each in found.explanations] == [pytest.approx(0.5)] * 2
    assert found.verdict.count("; or ") == 1
    lone = compare(Target("x", "V", 10.5, 10.0, (0.0, 0.0), model, [vbe()]))
    assert len(lone.explanations) == 1


def test_a_stage_that_does_not_idle_ends_the_search():
    def model(tolerance: Tolerance | None, share: float) -> float:
        return math.nan if share > 0.0 else 10.0 + share

    target = Target("x", "V", 12.0, 10.0, (0.0, 0.0), model, [vbe()])
    found = explain(target, vbe(), WITHIN)
    assert found.change is None
    assert found.reached == 10.0


# Tolerances


def test_windows_end_where_they_say():
    assert vbe().at(1.0) == 0.03
    assert vbe("upper").at(-0.5) == -0.015
    assert hfe().at(-1.0) == pytest.approx(0.5)
    assert hfe().at(1.0) == pytest.approx(1.6)
    assert hfe().at(0.0) == 1.0
    design = bench().design
    assert offset(design).window == "±10 mV"
    assert hfe().window == "×0.5 to ×1.6"
    assert shown_change(-0.0123, "V") == "-12.3 mV"
    transformer = {"kind": "transformer", "winding_v": 10, "winding_ohm": 0.5, "reservoir_f": 1e-3}
    mains = supply(make_design({"supply": transformer}))
    # IEC 60038: 230 V within 10 % (from memory).
    assert (mains.least, mains.most) == (-10.0, 10.0)
    assert mains.source.startswith("IEC 60038")


def test_a_tolerance_is_the_same_as_its_keys_in_the_design():
    design = bench().design
    assert str(vbe().circuit(design, 0.4, resistor=False)) == str(
        lower(replace(design, **VBE_12_MV))
    )
    assert str(feedback().circuit(design, 0.4, resistor=False)) == str(
        lower(replace(design, **{"driver.feedback_ohm": 33e3 * 1.02}))
    )


# Distortion against level


def thd(design: Design, input_peak_v: float) -> tuple[float, float]:
    """Output (rms, all of it) and distortion of a sine of 1 kHz, on a probe of its own."""
    probe = Probe(build_stage(design, resistor=True), 8)
    tone = probe.tone(((1000.0, input_peak_v),), RECORD_S)
    found = distortion_of(tone, probe.rate_hz)
    rms = math.sqrt(0.5) * found.fundamental_v * math.hypot(1.0, found.thd_f)
    return rms, found.thd_percent


def test_distortion_at_low_level_is_explained_by_vbe_to_the_half_millivolt(tmp_path):
    shifted = replace(bench().design, **VBE_12_MV)
    rows = [thd(shifted, 0.10), thd(bench().design, 0.10), (50.0, 1.0)]
    text = "output_v,thd_percent\n" + "\n".join(f"{out},{percent}" for out, percent in rows)
    found = measure_against(bench(), read_readings(write(tmp_path, text)))
    moved, same, unreached = found.comparisons
    first = moved.explanations[0]
    assert first.part == "VBE on both devices"
    assert first.within
    # Straight lines between eighths of 30 mV, rounded to a 64th: 0.5 mV.
    assert first.change == pytest.approx(0.012, abs=5e-4)
    assert first.reached == pytest.approx(moved.measured, rel=0.03)
    assert same.agrees
    assert same.deviation == pytest.approx(0.0, abs=2e-3 * same.measured)  # level within 0.1 %
    assert unreached.computed is None
    assert "does not reach" in unreached.verdict
    assert found.unsettled_steps == 0


def test_a_sine_near_clipping_is_explained_by_the_supply_its_output_compared_too(tmp_path):
    low = {"supply.positive_v": 14.85, "supply.negative_v": -14.85}
    out, percent = thd(replace(bench().design, **low), 0.52)
    text = f"input_peak_v;output_v;thd_percent;frequency_hz\n0.52;{out};{percent};1000\n"
    found = measure_against(bench(), read_readings(write(tmp_path, text)))
    output, clipped = found.comparisons
    assert output.unit == "V"
    assert output.measured == pytest.approx(out)
    assert output.agrees  # within 1 %, where distortion has grown by more than 5 %
    parts = {each.part: each for each in clipped.explanations}
    assert parts["the supply's voltage"].change == pytest.approx(-1.0, abs=0.05)


# Static curves


def test_a_closed_loops_curve_is_explained_by_feedback_and_agrees_with_itself(tmp_path):
    circuit = lower(replace(bench().design, **{"driver.feedback_ohm": 33e3 * 1.02}))
    inputs = (-0.4, -0.01, 0.0, 0.01, 0.4)
    outputs = [static_point(circuit, v, 15.0, 15.0).v_o for v in inputs]
    rows = [f"{x};{y}" for x, y in zip(inputs, outputs, strict=True)]
    path = write(tmp_path, "input_v;output_v # by hand\n" + "\n".join(rows))
    found = measure_against(bench(), read_readings(path))
    assert found.kind == "curve"
    assert len(found.comparisons) == 5
    assert found.comparisons[2].agrees
    for each in (found.comparisons[0], found.comparisons[-1]):
        assert best(each).part.startswith("feedback_ohm")
        # 1 + Rf/Rg moves by 2 % of Rf/Rg.
        assert best(each).change == pytest.approx(2.0, abs=0.01)
    own = [f"{x};{static_point(lower(bench().design), x, 15.0, 15.0).v_o}" for x in inputs]
    path = write(tmp_path, "input_v;output_v\n" + "\n".join(own))
    again = measure_against(bench(), read_readings(path))
    assert all(each.agrees for each in again.comparisons)
    assert all(each.deviation == pytest.approx(0.0, abs=1e-9) for each in again.comparisons)


def test_a_curve_of_the_drive_is_explained_by_vbe_of_the_half_that_carries_it(tmp_path):
    dead = Bench(
        make_design({"bias.upper": ["1N4148", "BAT85"], "bias.lower": ["1N4148", "BAT85"]})
    )
    altered = lower(replace(dead.design, **VBE_12_MV))
    drives = (-0.6, -0.3, 0.0, 0.3, 0.6)
    rows = [f"{v},{output_at_drive(altered, v, (15.0, 15.0))}" for v in drives]
    path = write(tmp_path, "drive_v,output_v\n" + "\n".join(rows))
    found = measure_against(dead, read_readings(path)).comparisons
    for each, side in ((found[0], "lower"), (found[-1], "upper")):
        first = next(e for e in each.explanations if e.part == f"VBE on the {side} device")
        # The other half, off by as much, still gives a little: 5 % of the change.
        assert first.change == pytest.approx(0.012, rel=0.05)


def test_the_drive_a_closed_loop_settles_at_gives_its_output_back():
    circuit = lower(bench().design)
    point = static_point(circuit, 0.2, 15.0, 15.0)
    assert output_at_drive(circuit, point.v_d, (15.0, 15.0)) == pytest.approx(point.v_o, abs=1e-6)


def test_a_row_whose_current_no_rail_can_give_is_not_reached():
    weak = Bench(make_design({"supply": {"kind": "battery", "positive_v": 12, "internal_ohm": 4}}))
    # 40 V into 8 ohm take 5 A, 20 V across the batteries' resistance.
    table = judge_table("drive", (-50, -25, 0, 25, 50), (-40, -20, 0, 20, 40))
    found = measure_against(weak, Readings("mine.csv", "curve", curve=table)).comparisons
    assert [each.computed is None for each in found] == [True, False, False, False, True]
    assert found[0].deviation is None
    assert "does not reach" in found[0].verdict


# Reading


def test_marks_of_spreadsheets_are_tolerated(tmp_path):
    text = "﻿# my bench\n\nFigure; Value\nupper_idle_a; 23 mA # hot\nGAIN;22.8\noffset_v;-4m\n"
    found = read_readings(write(tmp_path, text))
    assert found.kind == "figures"
    assert [(f.name, f.value, f.line) for f in found.figures] == [
        ("upper_idle_a", pytest.approx(0.023), 4),
        ("gain", 22.8, 5),
        ("offset_v", pytest.approx(-0.004), 6),
    ]


def test_levels_are_rms_unless_the_column_says_peak(tmp_path):
    text = "output_peak_v,thd_percent,frequency_hz\n1.41421356,0.3,5000\n"
    (row,) = read_readings(write(tmp_path, text)).levels
    assert row.output_v == pytest.approx(1.0)
    assert (row.input_v, row.thd_percent, row.frequency_hz, row.line) == (None, 0.3, 5000.0, 2)
    (row,) = read_readings(write(tmp_path, "thd_percent,input_mv\n0.3,20\n")).levels
    assert row.input_v == pytest.approx(0.02)
    assert (row.output_v, row.frequency_hz) == (None, 1000.0)


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        ("", "is empty, expected"),
        ("# nothing\n", "is empty, expected"),
        ("figure,value\n", "holds a header and no rows"),
        ("volts,amps\n1,2\n", "line 1: found the column names 'volts,amps', expected"),
        ("figure,value\nuper_idle_a,1\n", "line 2: 'uper_idle_a' is no known figure, nearest"),
        ("figure,value\nzzz,1\n", "line 2: 'zzz' is no known figure, known: upper_idle_a"),
        ("figure,value\n\ngain,loud\n", "line 3: gain: 'loud'"),
        ("figure,value\nupper_idle_a,3 V\n", "line 2: upper_idle_a: '3 V' is in V, expected A"),
        ("figure,value\ngain,1,5\n", "line 2: found 3 columns in '.*', expected 2"),
        ("figure,value\ngain,-3\n", "line 2: gain is '-3', expected a positive number"),
        ("figure,value\nrail_negative_v,15\n", "rail_negative_v is '15', expected a negative"),
        ("figure,value\ngain,20\ngain,21\n", "line 3: gain stands already at line 2"),
        ("thd_percent\n1\n", "line 1: found no column of the level"),
        (
            "output_v,thd_percnt\n1,1\n",
            "line 1: 'thd_percnt' is no known column, nearest known: thd_percent",
        ),
        ("output_v,output_mv,thd_percent\n1,1,1\n", "found 2 columns of output, expected one"),
        ("output_v,thd_percent\n1,x\n", "line 2: thd_percent is 'x', expected a number"),
        ("output_v,thd_percent\n0,1\n", "line 2: output_v is '0', expected more than 0"),
        ("output_v,thd_percent\n1,0\n", "line 2: thd_percent is '0', expected 1e-05 to 100"),
        ("output_v,thd_percent,frequency_hz\n1,1,5\n", "frequency_hz is '5', expected 10 to"),
        ("output_v,thd_percent\n" + "1,1\n" * 101, "holds 101 rows of distortion, expected 100"),
        ("drive_v,output_v\n1,2\n", "found 1 rows, expected 5"),
        ("input_v,output_v\n0,a\n", "line 2: found 'a', expected a number"),
    ],
)
def test_a_bad_table_is_named_by_file_and_line(tmp_path, text, sentence):
    path = write(tmp_path, text)
    with pytest.raises(DesignError, match=sentence) as caught:
        read_readings(path)
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_a_file_that_is_not_there_is_named(tmp_path):
    with pytest.raises(DesignError, match=r"none\.csv does not exist"):
        read_readings(tmp_path / "none.csv")


def test_the_example_in_readme_reads_and_says_what_readme_says(tmp_path):
    readme = (Path(__file__).parent.parent / "README.md").read_text()
    (text,) = [b for b in re.findall(r"```csv\n(.*?)```", readme, re.DOTALL) if "figure,value" in b]
    found = read_readings(write(tmp_path, text))
    assert "invented" in text
    first = found.figures[0]
    on = Bench(load_design("full-chain"))
    assert figures(on, **{first.name: first.value})[first.name].verdict in readme
    for name in FIGURES:
        assert f"`{name}`" in readme


# Command line


def run(*words: object):
    return CliRunner().invoke(commands, ["bench", *map(str, words)])


SMALL = ("hot-chain", "--set", "load.ohm=8")


def test_the_command_prints_the_comparison_as_text_csv_and_json(tmp_path):
    path = write(tmp_path, "figure,value\ngain,24.0\nrail_positive_v,15\nupper_idle_a,9\n")
    table = tmp_path / "out.csv"
    shown = run(*SMALL, "against", "--against", path, "--csv", table)
    assert shown.exit_code == 0, shown.output
    assert f"measured figures of {path}" in shown.output
    assert "of feedback_ohm" in shown.output
    assert "look for a fault" in shown.output
    assert "IDLE" not in shown.output  # named alone
    rows = list(csv.DictReader(io.StringIO(table.read_text())))
    measured = [r for r in rows if r["quantity"] == "measured"]
    assert [float(r["value"]) for r in measured] == [24.0, 15.0, 9.0]
    assert [r["unit"] for r in measured] == ["", "V", "A"]
    told = json.loads(run(*SMALL, "against", "--against", path, "--json").output)
    against = told["against"]
    assert against["kind"] == "figures"
    assert against["faults"] == 1
    gain = against["comparisons"][0]
    assert gain["explanations"][0]["within"] is True
    assert gain["explanations"][0]["source"].startswith("resistors of 5 %")
    assert gain["deviation_percent"] == pytest.approx(100.0 * (24.0 / 23.5 - 1.0), abs=0.02)


def test_the_section_comes_last_and_only_with_the_option(tmp_path):
    path = write(tmp_path, "figure,value\nrail_positive_v,15\n")
    shown = run("hot-chain", "stability", "--against", path)
    assert shown.exit_code == 0
    assert 0 < shown.output.index("STABILITY") < shown.output.index("AGAINST")
    _, sheet = measure_sheet(bench().design, ["stability"])
    assert "against" not in sheet.as_dict()
    assert not any(table.section == "against" for table in tables(sheet))
    assert check_sections(["clip"], against=True) == ("clip", "against")
    with pytest.raises(UsageError, match="needs --against FILE"):
        check_sections(["against"])


def test_exit_codes(tmp_path):
    bad = write(tmp_path, "figure,value\ngian,3\n")
    for words, code in (
        (("hot-chain", "against"), 2),
        (("hot-chain", "--against", bad), 11),
        (("hot-chain", "--against", tmp_path / "none.csv"), 11),
    ):
        with pytest.raises(SystemExit) as left:
            commands.main(["bench", *map(str, words)])
        assert left.value.code == code
