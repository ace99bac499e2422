"""The least bias: ladders, enumeration against halving, and what is refused."""

import json
from pathlib import Path

import numpy as np
import pytest
import soundfile as sf
from click.testing import CliRunner

from tonesim.cli import commands
from tonesim.designfile import load_design, replace
from tonesim.ear import Listening
from tonesim.errors import DesignError, UsageError
from tonesim.settle import (
    Rung,
    chain_ladder,
    climb,
    halve,
    stated_chains,
    value_ladder,
)
from tonesim.units import E24, preferred_between
from tonesim.verdict import Verdict

RATE = 48_000
ROOM = Listening(82.0, 30.0)
MULTIPLIER = "bias.multiplier.collector_base_ohm"


@pytest.fixture(scope="module")
def recording(tmp_path_factory) -> Path:
    """A decaying low string, half a second (invented)."""
    t = np.arange(RATE // 2) / RATE
    tone = sum(np.sin(2 * np.pi * 110.0 * k * t) / k for k in (1, 2, 3))
    path = tmp_path_factory.mktemp("settle") / "pluck.wav"
    sf.write(path, 0.05 * np.exp(-4.0 * t) * tone, RATE, "PCM_24")
    return path


@pytest.fixture(scope="module")
def ladder(recording):
    design = load_design("full-chain")
    return climb(design, chain_ladder(design, ["1N4148"], 2), [recording], ROOM)


def test_a_ladder_of_one_drop_has_half_steps():
    names = [each.name for each in chain_ladder(load_design("full-chain"), ["1N4148"], 2)]
    assert names == [
        "none",
        "1 x 1N4148 / none",
        "1 x 1N4148",
        "2 x 1N4148 / 1 x 1N4148",
        "2 x 1N4148",
    ]


def test_mixes_hold_every_multiset_once():
    """Chains of up to n drops of k types: the sum of C(k+i-1, i) (combinatorics)."""
    ladder = chain_ladder(load_design("full-chain"), ["1N4148", "BAT85"], 2)
    equal = [each for each in ladder if "/" not in each.name]
    assert len(equal) == 1 + 2 + 3
    assert len({each.name for each in ladder}) == len(ladder)


def test_the_rungs_stand_in_the_order_of_idle_current(ladder):
    idle = [rung.idle_a for rung in ladder.rungs]
    assert idle == sorted(idle)
    assert ladder.monotone
    assert all(rung.unsettled_steps == 0 for rung in ladder.rungs)


def test_the_least_rung_that_suffices_is_chosen(ladder):
    suffices = [rung.suffices for rung in ladder.rungs]
    assert suffices == sorted(suffices)  # none before, all from there
    assert ladder.chosen is ladder.rungs[suffices.index(True)]
    assert ladder.rungs[0].verdict is Verdict.AUDIBLE
    assert ladder.chosen.margin_db < 0.0


def test_distortion_falls_along_the_ladder_of_a_stage_that_was_unbiased(ladder):
    """Each drop lowers the crossover at a low level (common practice, no source)."""
    quiet = [rung.thd_percent[1] for rung in ladder.rungs]
    assert quiet[:4] == sorted(quiet[:4], reverse=True)


def test_heat_is_told_of_the_chosen_rung(ladder):
    hot = ladder.hot
    assert hot is not None
    assert hot.now_a == ladder.chosen.idle_a
    assert hot.chain_cool_a > hot.now_a  # a cool chain holds its voltage
    assert len(hot.runaway) == 2


def test_halving_finds_what_enumeration_finds(recording):
    design = load_design("vbe-multiplier")
    own = design.bias.multiplier.collector_base_ohm
    values = preferred_between(0.55 * own, 1.05 * own, E24)
    assert len(values) >= 5
    candidates = value_ladder(MULTIPLIER, values)
    every = climb(design, candidates, [recording], ROOM)
    some = halve(design, candidates, [recording], ROOM)
    assert every.chosen is not None
    assert some.chosen is not None
    assert some.chosen.candidate == every.chosen.candidate
    assert some.chosen.margin_db == every.chosen.margin_db
    assert len(some.rungs) < len(every.rungs)


def test_where_nothing_suffices_it_says_what_comes_nearest(recording):
    design = load_design("no-chain")
    found = climb(design, stated_chains(["none"]), [recording], ROOM)
    assert found.chosen is None
    assert found.hot is None
    assert "Nothing offered suffices: none comes nearest, pluck.wav" in found.notes[0]


def test_a_candidate_that_makes_no_stage_is_told_and_left_out(recording):
    design = load_design("full-chain")
    found = climb(
        design, stated_chains(["1N4148", "LED-red,LED-red,LED-red,LED-red"]), [recording], ROOM
    )
    assert [each.candidate.name for each in found.rungs] == ["1 x 1N4148"]
    assert len(found.refused) == 1
    assert found.refused[0].reason
    with pytest.raises(DesignError, match="no candidate makes a usable stage"):
        climb(design, stated_chains(["no-such-drop"]), [recording], ROOM)


def test_chains_are_read_as_written():
    apart, none = stated_chains(["1N4148,BAT85/1N4148", "none"])
    assert dict(apart.changes)["bias.upper"] == ["1N4148", "BAT85"]
    assert dict(apart.changes)["bias.lower"] == ["1N4148"]
    assert dict(none.changes)["bias.upper"] == dict(none.changes)["bias.lower"] == []


def test_too_much_is_refused():
    design = load_design("full-chain")
    with pytest.raises(UsageError, match="expected 64 or fewer"):
        chain_ladder(design, ["1N4148", "BAT85", "1N5819"], 5)
    with pytest.raises(UsageError, match="needs candidates and recordings"):
        climb(design, (), [], ROOM)


def test_the_command_prints_saves_and_tells(recording, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    asked = ["settle", str(recording), "-d", "full-chain"]
    asked += ["--chain", "1N4148", "--chain", "1N4148,1N4148"]
    shown = CliRunner().invoke(commands, [*asked, "--save", "settled.toml"])
    assert shown.exit_code == 0, shown.output
    assert "Least bias that hides it: 2 x 1N4148" in shown.stdout
    assert "One step less: 1 x 1N4148" in shown.stdout
    saved = load_design("settled.toml")
    assert [drop.name for drop in saved.bias.upper] == ["1N4148", "1N4148"]
    told = json.loads(CliRunner().invoke(commands, [*asked, "--json"]).stdout)
    assert told["chosen"] == "2 x 1N4148"
    assert [rung["verdict"] for rung in told["rungs"]][-1] == "inaudible"


@pytest.mark.parametrize(
    ("more", "said"),
    [
        (["--key", MULTIPLIER], "--key and --between belong together"),
        (["--key", MULTIPLIER, "--between", "9k", "1k"], "no value of E24"),
        (["--save", "nowhere/x.toml"], "does not exist"),
    ],
)
def test_bad_options_are_one_sentence(recording, tmp_path, monkeypatch, more, said):
    monkeypatch.chdir(tmp_path)
    result = CliRunner().invoke(commands, ["settle", str(recording), "-d", "full-chain", *more])
    assert result.exit_code not in (0, 1)
    assert said in result.output
    assert list(tmp_path.iterdir()) == []


def test_a_design_without_drops_asks_for_one(recording, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    result = CliRunner().invoke(commands, ["settle", str(recording), "-d", "no-chain"])
    assert "name one with --drop" in result.output


def test_a_rung_is_what_the_design_says(ladder):
    rung = ladder.rungs[2]
    assert isinstance(rung, Rung)
    assert rung.design == replace(
        load_design("full-chain"), **{"bias.upper": ["1N4148"], "bias.lower": ["1N4148"]}
    )
