"""Builds within tolerances: draws, figures, statistics, files."""

import csv
import json
import math
from dataclasses import replace
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from click.testing import CliRunner
from conftest import make_design
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from tonesim import pool, spread
from tonesim.bench import Bench
from tonesim.catalogue import diode_drop, load_catalogue
from tonesim.check import check_design
from tonesim.circuit import lower
from tonesim.cli import commands
from tonesim.design import Design
from tonesim.designfile import design_to_toml, list_presets, load_design
from tonesim.distortion import measure_point
from tonesim.errors import DesignError, OutputError, SolverError, UsageError
from tonesim.figures import Conditions, Evidence, Figures, Measured, Reach, measure_build
from tonesim.limits import current_gain
from tonesim.ranks import beyond_chance, rank_correlations, rank_regression
from tonesim.spread import (
    QUANTITIES,
    SpreadReport,
    check_place,
    run_spread,
    table_text,
    worst_text,
    write_place,
)
from tonesim.stage import find_idle
from tonesim.tolerance import (
    CLASSES,
    Tolerances,
    Varied,
    build_with,
    draw,
    hfe_range,
    resistor_percent,
    varied_parts,
)
from tonesim.units import db_to_ratio

NONE = Tolerances(
    resistors_percent=0.0,
    vbe_v=0.0,
    hfe_least=1.0,
    hfe_most=1.0,
    diode_v=0.0,
    offset_v=0.0,
    op_amp_percent=0.0,
    reservoir_percent=0.0,
    supply_percent=0.0,
)
DEFAULTS = Tolerances()


@pytest.fixture(scope="module")
def report() -> SpreadReport:
    """A small true spread of the bench piece, shared by those that only read it."""
    return run_spread(make_design(), 12, DEFAULTS, seed=3)


def drawn_once(design: Design, tolerances: Tolerances, seed: int = 0) -> dict[str, float]:
    return draw(varied_parts(design, tolerances), np.random.default_rng(seed))


# Tolerances and draws


def test_letters_stand_for_per_cent():
    # IEC 60062, table of tolerance letters (from memory).
    expected = {"B": 0.1, "C": 0.25, "D": 0.5, "F": 1, "G": 2, "J": 5, "K": 10, "M": 20}
    assert expected == CLASSES
    assert [resistor_percent(text) for text in ("j", "K", "2", "0.5 %")] == [5.0, 10.0, 2.0, 0.5]
    with pytest.raises(UsageError, match="resistors is 'Q', expected per cent or a letter"):
        resistor_percent("Q")


@pytest.mark.parametrize(
    ("key", "value"),
    [
        ("resistors_percent", -1.0),
        ("resistors_percent", math.nan),
        ("vbe_v", 0.2),
        ("diode_v", -0.01),
        ("offset_v", 0.2),
        ("hfe_least", 1.1),
        ("hfe_most", 9.0),
        ("supply_percent", 60.0),
    ],
)
def test_what_is_no_tolerance_is_refused(key, value):
    with pytest.raises(UsageError, match=r"tolerance of .* expected"):
        replace(DEFAULTS, **{key: value})


@pytest.mark.parametrize("preset", list_presets())
def test_draws_of_every_preset_stay_in_their_range_and_change_what_they_name(preset):
    design = load_design(preset)
    varied = varied_parts(design, DEFAULTS)
    assert len({each.part for each in varied}) == len(varied)
    drawn = draw(varied, np.random.default_rng(1))
    build = build_with(design, drawn)
    for each in varied:
        ends = [each.values(z) for z in (-1.0, 1.0)]
        for k, key in enumerate(each.keys):
            low, high = sorted(end[k] for end in ends)
            assert low <= drawn[key] <= high
            value: object = build
            for step in key.split("."):
                value = value[int(step)] if isinstance(value, tuple) else getattr(value, step)
            assert value == drawn[key]


def test_each_half_s_parts_are_drawn_by_themselves():
    keys = drawn_once(load_design("vbe-multiplier"), DEFAULTS)
    for pair in ("bias.{}_feed_ohm", "bias.{}_multiplier.part.hfe", "output.{}_vbe_shift_v"):
        assert keys[pair.format("upper")] != keys[pair.format("lower")]


def test_both_windings_hang_on_one_mains():
    design = load_design("lopsided-rails")
    two = make_design(
        {
            "supply": {
                "kind": "transformer",
                "positive_winding_v": 10.0,
                "negative_winding_v": 11.0,
                "winding_ohm": 0.5,
                "reservoir_f": 4700e-6,
            }
        }
    )
    keys = drawn_once(two, DEFAULTS)
    up, down = keys["supply.positive_winding_v"], keys["supply.negative_winding_v"]
    assert up / 10.0 == pytest.approx(down / 11.0, rel=1e-14)
    # A bench supply is set by its user.
    assert not [key for key in drawn_once(design, DEFAULTS) if key.startswith("supply")]


laws = st.sampled_from(("shift", "factor", "ratio"))


@given(laws, st.floats(-1, 1), st.floats(0, 0.5), st.floats(0, 0.4))
def test_a_wider_tolerance_never_brings_a_value_nearer_to_nominal(law, z, narrow, more):
    def off(width: float) -> float:
        low, high = (-width, width) if law == "shift" else (1.0 - width, 1.0 + width)
        (value,) = Varied("a", "b", ("c",), (3.0,), law, low, high).values(z)
        return abs(value - 3.0)

    assert off(narrow + more) >= off(narrow) - 1e-12  # rounding of values about 3


@given(laws, st.floats(0.1, 100))
def test_the_middle_of_a_range_is_the_nominal_to_the_bit(law, nominal):
    low, high = (-0.3, 0.2) if law == "shift" else (0.5, 1.6)
    assert Varied("a", "b", ("c",), (nominal,), law, low, high).values(0.0) == (nominal,)


def test_a_gain_drawn_stays_inside_the_sheet_s_windows():
    part = load_catalogue().transistor("BD139")  # 63 to 160 at 150 mA: Central, CDIL sheets
    low, high = hfe_range(part, 1.0, DEFAULTS)
    gain = current_gain(part, 0.15, 25.0)
    assert gain * low == pytest.approx(63.0)
    assert gain * high == pytest.approx(160.0)
    # A part that is outside by itself is drawn from there towards the window only.
    low, high = hfe_range(part, 0.5, DEFAULTS)
    assert (low, high) == (1.0, DEFAULTS.hfe_most)


def test_a_drop_moves_by_its_volts_at_any_current():
    design = make_design()
    (one,) = (v for v in varied_parts(design, DEFAULTS) if v.part.startswith("upper drop"))
    diode = design.bias.upper[0]
    for z, moved in ((-1.0, 0.020), (1.0, -0.020), (0.5, -0.010)):
        other = diode.model_copy(update={"is_a": one.values(z)[0]})
        for current in (1e-3, 5e-3):
            change = diode_drop(other, current) - diode_drop(diode, current)
            assert change == pytest.approx(moved, abs=1e-6)  # the 1 in ln(I/Is + 1): n Vt Is/I


def test_gain_from_two_uniform_resistors_meets_its_integrals():
    # E[1 + r u/v] with u, v uniform on 1 ± t: E[1/v] = ln((1+t)/(1-t))/(2t), E[u²] = 1 + t²/3,
    # E[1/v²] = 1/(1-t²), integrated by hand.
    t, n = 0.1, 20_000
    design = make_design()
    varied = varied_parts(design, replace(NONE, resistors_percent=100 * t))
    rng = np.random.default_rng(5)
    draws = [draw(varied, rng) for _ in range(n)]
    gains = [1.0 + d["driver.feedback_ohm"] / d["driver.ground_leg_ohm"] for d in draws]
    r = 33e3 / 1500.0
    inverse = math.log((1 + t) / (1 - t)) / (2 * t)
    mean = 1.0 + r * inverse
    variance = r**2 * ((1 + t**2 / 3) / (1 - t**2) - inverse**2)
    assert np.mean(gains) == pytest.approx(mean, abs=4.0 * math.sqrt(variance / n))
    # The variance of a sample of nearly triangular values is itself known to about 1 %.
    assert np.var(gains) == pytest.approx(variance, rel=0.04)


def test_half_of_all_gains_lie_below_nominal():
    varied = varied_parts(make_design(), DEFAULTS)
    rng = np.random.default_rng(6)
    factors = [draw(varied, rng)["output.upper_hfe_factor"] for _ in range(2000)]
    below = sum(factor < 1.0 for factor in factors)
    assert stats.binomtest(below, 2000, 0.5).pvalue > 1e-3


def test_drawing_past_what_a_design_can_say_is_refused_before_the_work():
    design = make_design({"output.upper_vbe_shift_v": 0.08})
    with pytest.raises(UsageError, match=r"output\.upper_vbe_shift_v would be drawn from 0\.05"):
        varied_parts(design, DEFAULTS)
    with pytest.raises(DesignError):  # the range it names is the design's own
        make_design({"output.upper_vbe_shift_v": 0.1001})
    with pytest.raises(DesignError):
        make_design({"output.upper_hfe_factor": 0.199})


def test_a_measured_curve_is_one_build_and_not_drawn():
    drive = [-12.0, -6.0, -1.0, 0.0, 1.0, 6.0, 12.0]
    curve = {
        "drive_v": drive,
        "output_v": [-10.5, -5.0, -0.2, 0.0, 0.2, 5.0, 10.5],  # invented
        "positive_v": 15.0,
        "load_ohm": 8.0,
    }
    design = make_design({"measured": curve})
    with pytest.raises(DesignError, match="which holds the parts of one build"):
        varied_parts(design, DEFAULTS)


# Figures of one build


def conditions_for(design: Design) -> Conditions:
    clip = Bench(design).clip_point.input_peak_v
    return Conditions(clip * db_to_ratio(-3.0), clip * db_to_ratio(-40.0))


def informed(design: Design) -> tuple[Conditions, Measured]:
    conditions = conditions_for(design)
    whole = measure_build(design, conditions)
    return replace(conditions, reach=whole.reach), whole


UNBIASED = {"bias.upper": [], "bias.lower": []}
BIASED = {"bias.upper": ["1N4148"] * 2, "bias.lower": ["1N4148"] * 2}


@pytest.mark.parametrize(("changes", "rel"), [(BIASED, 1e-3), (UNBIASED, 6e-3)])
def test_figures_are_those_of_check_and_of_the_fine_bench(changes, rel):
    design = make_design(changes)
    found = measure_build(design, conditions_for(design)).figures
    check = check_design(design)
    assert found.idle_a == max(min(check.upper.idle_a, check.lower.idle_a), 0.0)
    assert found.offset_v == check.output_offset_v
    assert found.gain == check.gain
    assert found.clip_upper_v == check.upper.clip.level_v
    assert found.clip_lower_v == check.lower.clip.level_v
    # Eight times the rate is what the bench takes for true. Measured: 0.5 % with a dead zone, less
    # than 0.1 % without one.
    bench = Bench(design)
    for level, thd in ((-3.0, found.thd_loud_percent), (-40.0, found.thd_quiet_percent)):
        fine = measure_point(bench, bench.fine_probe.twin(), 1000.0, level)
        assert thd == pytest.approx(fine.harmonics.thd_percent, rel=rel, abs=1e-7)  # -180 dB


@pytest.mark.parametrize("changes", [{}, UNBIASED])
def test_part_of_the_surfaces_is_enough(changes):
    design = make_design(changes)
    conditions, whole = informed(design)
    part = measure_build(design, conditions)
    assert part.evidence.measured_twice == 0
    # Nodes are found from other neighbours: equal to what the solution leaves, about 1e-12 A of 1.
    for key in QUANTITIES:
        assert getattr(part.figures, key) == pytest.approx(
            getattr(whole.figures, key), rel=1e-7, abs=1e-12
        )


def test_who_goes_further_than_expected_is_measured_again_on_the_whole():
    design = make_design(UNBIASED)
    conditions, whole = informed(design)
    short = replace(conditions, reach=Reach(drive_v=0.1, sag=0.0))
    again = measure_build(design, short)
    assert again.evidence.measured_twice == 1
    assert again.figures == whole.figures


def test_a_half_that_an_offset_turns_off_idles_at_nothing():
    design = make_design({**UNBIASED, "driver.offset_v": 0.005})
    check = check_design(design)
    assert min(check.upper.idle_a, check.lower.idle_a) < 0.0  # what leaks back through its base
    assert measure_build(design, Conditions(0.1, 0.01)).figures.idle_a == 0.0


# Spreads


def test_the_same_seed_draws_the_same_builds_on_any_number_of_threads(report, monkeypatch):
    monkeypatch.setattr(pool, "workers", lambda: 1)
    assert run_spread(make_design(), 12, DEFAULTS, seed=3) == report


def test_more_builds_begin_with_the_fewer_and_another_seed_draws_others(report, monkeypatch):
    def counted(design: Design, conditions: Conditions) -> Measured:
        raise SolverError("not measured")

    design, varied = make_design(), varied_parts(make_design(), DEFAULTS)
    monkeypatch.setattr(spread, "measure_build", counted)

    def draws(runs: int, seed: int) -> list[dict[str, float]]:
        seeds = np.random.SeedSequence(seed).spawn(runs)
        nothing = Conditions(1.0, 1.0)
        return [spread._one_build(design, varied, 1, each, nothing).drawn for each in seeds]

    assert draws(20, 3)[:12] == [build.drawn for build in report.builds]
    assert draws(1, 4)[0] != report.builds[0].drawn


def test_without_tolerances_every_build_is_the_nominal():
    found = run_spread(make_design(), 10, NONE, seed=1)
    assert all(build.figures == found.nominal for build in found.builds)
    for each in found.distributions:
        assert each.least == each.median == each.most == each.nominal == each.worst
    for ranking in found.rankings:
        assert ranking.explained is None
        assert not any(part.share or part.beyond_chance for part in ranking.parts)


def test_distributions_are_those_of_the_builds(report):
    assert report.measured == 12
    for each in report.distributions:
        values = [getattr(build.figures, each.quantity) for build in report.builds]
        assert (each.least, each.most) == (min(values), max(values))
        # Definition 7 of Hyndman and Fan 1996, by hand: 11 gaps, the median between 6 and 7.
        ordered = sorted(values)
        assert each.median == pytest.approx((ordered[5] + ordered[6]) / 2.0)
        assert each.at_25_percent == pytest.approx(ordered[2] + 0.75 * (ordered[3] - ordered[2]))
        assert each.worst == values[each.worst_build - 1]
    by = {each.quantity: each for each in report.distributions}
    assert by["idle_a"].worst == by["idle_a"].most
    assert abs(by["offset_v"].worst) == max(abs(by["offset_v"].least), abs(by["offset_v"].most))
    assert by["clip_upper_v"].worst == by["clip_upper_v"].least
    assert by["clip_lower_v"].worst == by["clip_lower_v"].most
    assert report.evidence.unsettled_steps == 0
    assert report.evidence.unsteady_tones == 0
    assert report.evidence.residual_a < 1e-6


def test_offset_is_the_op_amp_s_times_the_gain(report):
    for build in report.builds:
        gain = 1.0 + build.drawn["driver.feedback_ohm"] / build.drawn["driver.ground_leg_ohm"]
        assert build.figures.gain == pytest.approx(gain, rel=2e-4)  # gain / open-loop gain
        # Beside it the op-amp's output, up to a volt past the dead zone, over its open-loop gain.
        left = 2.0 * gain / build_with(make_design(), build.drawn).driver.part.dc_gain
        assert build.figures.offset_v == pytest.approx(
            build.drawn["driver.offset_v"] * gain, abs=left
        )
    (ranking,) = (each for each in report.rankings if each.quantity == "offset_v")
    assert ranking.parts[0].name == "op-amp, input offset"
    assert ranking.parts[0].share > 0.95


def at_rest(build: Design, conditions: Conditions) -> Measured:
    """The true idle point and nothing else."""
    idle = find_idle(lower(build), "a build")
    figures = Figures(idle.upper_current_a, idle.output_v, build.driver.gain, 1.0, -1.0, 0.1, 0.1)
    return Measured(figures, Evidence(idle.residual_a, 0, 0, 0, 0), Reach(1.0, 0.0))


def test_an_idle_current_that_only_vbe_moves_is_put_down_to_vbe(monkeypatch):
    monkeypatch.setattr(spread, "measure_build", at_rest)
    found = run_spread(make_design(BIASED), 60, replace(NONE, vbe_v=0.03), seed=2)
    (ranking,) = (each for each in found.rankings if each.quantity == "idle_a")
    assert ranking.groups[0].name == "output pair VBE"
    assert ranking.groups[0].beyond_chance
    assert all(group.share == 0.0 for group in ranking.groups[1:])
    # A sum of two uniform values: its ranks are nearly, not quite, linear in theirs.
    assert ranking.explained > 0.9
    assert ranking.groups[0].share == pytest.approx(1.0, abs=0.3)  # shares of 60 add up by chance
    for part in ranking.parts[:2]:
        assert part.rank_correlation < -0.5  # more VBE, less current


def test_a_wider_tolerance_spreads_idle_currents_wider():
    design = make_design(BIASED)
    spans = []
    for scale in (0.5, 1.0):
        tolerances = replace(
            NONE, vbe_v=0.03 * scale, diode_v=0.02 * scale, resistors_percent=5.0 * scale
        )
        varied, rng = varied_parts(design, tolerances), np.random.default_rng(8)
        builds = [build_with(design, draw(varied, rng)) for _ in range(25)]
        idle = [find_idle(lower(build), "a build").upper_current_a for build in builds]
        spans.append(np.quantile(idle, (0, 0.25, 0.75, 1)))
    narrow, wide = spans
    assert wide[3] - wide[0] > 1.5 * (narrow[3] - narrow[0])  # about 2, as the law bends
    assert wide[2] - wide[1] > 1.5 * (narrow[2] - narrow[1])


def pretended(build: Design, conditions: Conditions) -> Measured:
    """Figures without solving anything, where only what becomes of them is under test."""
    gain, volts = build.driver.gain, build.supply.open_positive_v
    figures = Figures(0.05, gain * build.driver.offset_v, gain, volts, -volts, 0.1, 1.0)
    return Measured(figures, Evidence(0.0, 0, 0, 0, 0), Reach(1.0, 0.0))


@pytest.fixture
def quick(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(spread, "measure_build", pretended)
    clip = SimpleNamespace(input_peak_v=0.5)
    monkeypatch.setattr(spread, "Bench", lambda design: SimpleNamespace(clip_point=clip))


BATTERIES = {"kind": "battery", "positive_v": 17.7, "internal_ohm": 0.1}


def test_a_build_that_its_parts_cannot_bear_is_counted_with_its_reason(quick):
    # A TL072 stands 36 V (ST and TI sheets); two batteries of 17.7 V within 10 % may bring more.
    design = make_design({"supply": BATTERIES})
    found = run_spread(design, 10, replace(NONE, supply_percent=10.0), seed=1)
    too_high = [
        build.number
        for build in found.builds
        if build.drawn["supply.positive_v"] - build.drawn["supply.negative_v"] > 36.0
    ]
    assert 0 < len(too_high) < 10
    (refusal,) = found.refusals
    assert (refusal.count, refusal.share) == (len(too_high), len(too_high) / 10)
    assert refusal.first_build == too_high[0]
    assert not refusal.cannot_idle
    assert refusal.reason.startswith("driver.part is TL072, which stands 36 V in all, found 1")
    assert found.measured == 10 - len(too_high)
    assert [b.number for b in found.builds if b.figures is None] == too_high


def test_a_build_that_cannot_idle_is_counted_and_none_at_all_is_an_error(quick, monkeypatch):
    design = make_design()

    def restless(one: Design, conditions: Conditions) -> Measured:
        if one.output.upper_vbe_shift_v > limit:
            raise SolverError(f"no idle point (imbalance {one.output.upper_vbe_shift_v:.3g} A)")
        return pretended(one, conditions)

    monkeypatch.setattr(spread, "measure_build", restless)
    limit = 0.01
    found = run_spread(design, 10, DEFAULTS, seed=1)
    (refusal,) = found.refusals
    assert refusal.cannot_idle
    expected = [b for b in found.builds if b.drawn["output.upper_vbe_shift_v"] > limit]
    assert refusal.count == len(expected) > 1
    monkeypatch.setattr(spread, "build_with", lambda *_: (_ for _ in ()).throw(DesignError("no")))
    with pytest.raises(SolverError, match="none of 10 builds can be measured; build 1: no"):
        run_spread(design, 10, DEFAULTS, seed=1)


@pytest.mark.parametrize(("runs", "seed"), [(9, 1), (10_001, 1), (10, -1)])
def test_runs_and_seed_have_their_range(runs, seed):
    with pytest.raises(UsageError, match="expected"):
        run_spread(make_design(), runs, DEFAULTS, seed)


# Ranks


def test_rank_correlation_is_spearman_s(rng):
    # Worked example of an encyclopaedia article on the coefficient (from memory): -29/165.
    iq = [106, 100, 86, 101, 99, 103, 97, 113, 112, 110]
    hours = [7, 27, 2, 50, 28, 29, 20, 12, 6, 17]
    assert rank_correlations(np.array(iq)[:, None], hours)[0] == pytest.approx(-29 / 165)
    x = rng.integers(0, 8, (40, 3)).astype(float)  # with ties
    y = x[:, 1] ** 3 + rng.normal(size=40)
    found = rank_correlations(np.column_stack([x, np.full(40, 2.0)]), y)
    for k in range(3):
        assert found[k] == pytest.approx(stats.spearmanr(x[:, k], y).statistic, abs=1e-12)
    assert found[3] == 0.0


def test_rank_regression_explains_what_is_there(rng):
    x = rng.uniform(size=(60, 3))
    assert rank_regression(x, np.exp(5.0 * x[:, 0])) == pytest.approx(1.0)
    assert rank_regression(x, np.zeros(60)) is None
    assert rank_regression(x[:7], x[:7, 0]) is None  # seven builds, three parts
    assert rank_regression(x, rng.uniform(size=60)) < 0.2
    # One column: the straight line of scipy, adjusted by hand.
    y = x[:, 0] + rng.uniform(size=60)
    line = stats.linregress(stats.rankdata(x[:, 0]), stats.rankdata(y))
    expected = 1.0 - (1.0 - line.rvalue**2) * 59 / 58
    assert rank_regression(x[:, :1], y) == pytest.approx(expected, abs=1e-12)


def test_parts_without_influence_seldom_stand_out(rng):
    """Three standard deviations of chi-squared with one degree: 2.2 % of all (scipy.stats)."""
    n, trials = 50, 2000
    rho = rank_correlations(rng.uniform(size=(n, trials)), rng.uniform(size=n))
    beyond = sum(beyond_chance(r * r, 1, 1.0 / (n - 1)) for r in rho)
    expected = stats.chi2.sf(1.0 + 3.0 * math.sqrt(2.0), 1)
    assert beyond / trials == pytest.approx(expected, abs=0.01)  # three standard errors
    assert np.mean(rho**2) == pytest.approx(1.0 / (n - 1), rel=0.1)


# Files and the command


def test_a_table_reads_back_to_the_same_numbers(report, tmp_path):
    path = tmp_path / "builds.csv"
    write_place(path, table_text(report))
    with path.open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == 12
    for row, build in zip(rows, report.builds, strict=True):
        assert int(row["build"]) == build.number
        assert row["left out because"] == ""
        assert {key: float(row[key]) for key in build.drawn} == build.drawn
        assert {key: float(row[key]) for key in QUANTITIES} == vars(build.figures)
    write_place(path, table_text(report))  # a table of ours is replaced
    assert [each.name for each in tmp_path.iterdir()] == ["builds.csv"]


def test_the_worst_build_loads_and_idles_as_told(report, tmp_path):
    path = tmp_path / "worst.toml"
    write_place(path, worst_text(report, make_design(), "idle_a"))
    loaded = load_design(path)
    idle = report.distributions[0]
    figures = measure_build(loaded, Conditions(report.loud_peak_v, report.quiet_peak_v)).figures
    assert figures.idle_a == idle.worst
    assert loaded.title.endswith(f"build {idle.worst_build} of seed 3")
    assert loaded.driver.part.name == "TL072, drawn"
    assert loaded.output.upper.name == "TIP122"


def test_a_file_of_other_origin_is_left_alone(tmp_path):
    mine = tmp_path / "mine.toml"
    mine.write_text("title = 'mine'", encoding="utf-8")
    with pytest.raises(OutputError, match="was not written by tonesim spread"):
        check_place(mine)
    with pytest.raises(OutputError, match="does not exist"):
        check_place(tmp_path / "nowhere" / "builds.csv")
    with pytest.raises(OutputError, match="cannot be written"):
        check_place(tmp_path)


@pytest.fixture
def here(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    Path("piece.toml").write_text(design_to_toml(make_design()), encoding="utf-8")
    return tmp_path


def test_the_command_prints_writes_and_repeats(here, quick):
    args = ["spread", "piece.toml", "--runs", "10", "--seed", "7", "--resistors", "F"]
    args += ["--vbe", "20m", "--hfe", "0.8", "1.2", "--drops", "0.01", "--offset", "2m"]
    more = ["--csv", "b.csv", "--save-worst", "idle", "hot.toml"]
    told = CliRunner().invoke(commands, [*args, *more])
    assert told.exit_code == 0, told.output
    for words in (
        "10 builds measured of 10, seed 7",
        "idle current",
        "what it comes from",
        "op-amp offset",
        "±1 %",
        "±20 mV",
        "x 0.8 to x 1.2",
        "steps that did not settle 0",
    ):
        assert words in told.stdout
    assert load_design("hot.toml").title.startswith("bench piece, build ")
    asked = CliRunner().invoke(commands, [*args, "--json"])
    data = json.loads(asked.stdout)
    assert (data["measured"], data["seed"]) == (10, 7)
    rows = list(csv.DictReader(Path("b.csv").read_text(encoding="utf-8").splitlines()))
    (gain,) = (each for each in data["distributions"] if each["quantity"] == "gain")
    assert float(rows[gain["worst_build"] - 1]["gain"]) == gain["worst"]
    assert "builds" not in data


@pytest.mark.parametrize(
    ("args", "code", "words"),
    [
        (["--save-worst", "loudness", "a.toml"], 2, "expected one of idle, offset, gain"),
        (["--csv", "a", "--save-worst", "idle", "./a"], 2, "asked for twice"),
        (["--csv", "piece.toml"], 13, "is also an input"),
        (["--csv", "other"], 13, "other exists and was not written by tonesim spread"),
        (["--runs", "3"], 2, "runs are 3, expected 10 to 10000"),
        (["--vbe", "1k"], 2, "tolerance of vbe is 1000, expected 0 to 0.1 V"),
        (["--resistors", "7 ohm"], 2, "tolerance of resistors is '7 ohm'"),
    ],
)
def test_a_command_that_cannot_work_says_so_in_a_sentence(here, args, code, words):
    Path("other").write_text("of mine", encoding="utf-8")
    result = CliRunner().invoke(commands, ["spread", "piece.toml", *args])
    assert (result.exit_code, result.stdout) == (code, "")
    assert words in result.stderr
    assert sorted(each.name for each in here.iterdir()) == ["other", "piece.toml"]
