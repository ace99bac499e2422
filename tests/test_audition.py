"""A recording through a design and its twins, and what the ear says of it."""

import csv
import io
import json
from pathlib import Path

import numpy as np
import pytest
import soundfile as sf
from click.testing import CliRunner

from tonesim.audition import Audition, Residual, audition
from tonesim.cli import commands
from tonesim.design import Design
from tonesim.designfile import load_design, replace
from tonesim.ear import Listening
from tonesim.hearing import frames_csv, verdict_tables
from tonesim.report import RenderOptions
from tonesim.verdict import Verdict
from tonesim.wav import open_recording

RATE = 48_000
ROOM = Listening(82.0, 30.0)


def pluck(seconds: float = 1.6, peak: float = 0.1, decay: float = 3.0) -> np.ndarray:
    """Three partials of a low string that die away (invented)."""
    t = np.arange(round(seconds * RATE)) / RATE
    tone = sum(np.sin(2 * np.pi * 110.0 * k * t) / k for k in (1, 2, 3))
    return peak * np.exp(-decay * t) * tone / 1.5


def heard(path: Path, samples: np.ndarray, design: Design, **more) -> list[Audition]:
    sf.write(path, samples, RATE, "DOUBLE")
    with open_recording(path) as recording:
        return audition(recording, design, more.pop("listening", ROOM), RenderOptions(), **more)


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    return tmp_path_factory.mktemp("audition")


@pytest.fixture(scope="module")
def unbiased(folder) -> Audition:
    (found,) = heard(folder / "pluck.wav", pluck(), load_design("no-chain"))
    return found


def test_a_stage_without_bias_is_heard(unbiased):
    """Crossover of an unbiased stage on a decaying note is heard (common practice, no source)."""
    assert unbiased.bias.audibility.verdict is Verdict.AUDIBLE
    assert unbiased.everything.audibility.verdict is Verdict.AUDIBLE
    assert unbiased.unsettled_steps == 0
    assert unbiased.idle_a < 1e-6 < unbiased.twin_idle_a


def test_a_warm_chain_is_not(folder):
    (found,) = heard(folder / "warm.wav", pluck(), load_design("full-chain"))
    assert found.bias.audibility.verdict is Verdict.INAUDIBLE
    assert found.everything.audibility.verdict is Verdict.INAUDIBLE
    assert found.bias.audibility.margins.margin_db < -20.0
    assert found.unsettled_steps == 0


def test_a_stage_that_is_its_own_twin_leaves_nothing(folder):
    """A purely linear difference, here none, leaves less than -100 dB."""
    (found,) = heard(folder / "hot.wav", pluck(), load_design("hot-chain"), search=False)
    assert found.shift_v == 0.0
    assert found.bias.match.gain == pytest.approx(1.0, abs=1e-12)
    assert found.bias.match.residual_db < -250.0
    assert found.bias.audibility.residual_db < -100.0
    assert found.bias.audibility.verdict is Verdict.INAUDIBLE
    assert found.bias.levels is None


def test_a_gain_alone_is_taken_out(folder):
    """Both signals through one more attenuator: the match scales, the verdict stays."""
    quiet = replace(load_design("no-chain"), **{"input.gain_db": -6.0})
    (lower,) = heard(folder / "a.wav", pluck(), quiet, search=False)
    (same,) = heard(
        folder / "b.wav", pluck() * 10 ** (-6 / 20), load_design("no-chain"), search=False
    )
    assert lower.bias.audibility.nmr_p95_db == pytest.approx(
        same.bias.audibility.nmr_p95_db, abs=1e-6
    )


def test_the_weaker_the_bias_the_larger_the_margin(folder):
    """Each drop lowers the crossover (common practice, no source)."""
    margins = []
    for name in ("no-chain", "partial-chain", "three-drops", "full-chain"):
        (found,) = heard(folder / f"{name}.wav", pluck(0.8), load_design(name), search=False)
        margins.append(found.bias.audibility.nmr_p95_db)
    assert margins == sorted(margins, reverse=True)


def test_a_louder_room_and_a_lower_level_hide_more(folder):
    figures = []
    for listening in (Listening(82.0), ROOM, Listening(62.0, 30.0), Listening(22.0, 45.0)):
        (found,) = heard(
            folder / "room.wav",
            pluck(0.8),
            load_design("partial-chain"),
            listening=listening,
            search=False,
        )
        figures.append(found.bias.audibility.nmr_p95_db)
    assert figures == sorted(figures, reverse=True)


def test_a_dead_channel_is_a_sensible_answer(folder):
    pair = np.column_stack([pluck(0.6), np.zeros(round(0.6 * RATE))])
    first, second = heard(folder / "pair.wav", pair, load_design("no-chain"), search=False)
    assert (first.channel, second.channel) == (0, 1)
    assert first.bias.audibility.verdict is Verdict.AUDIBLE
    assert second.bias.audibility.verdict is Verdict.INAUDIBLE
    assert second.bias.audibility.active_frames == 0


@pytest.mark.parametrize("frames", [1, 700])
def test_less_than_a_frame_is_padded(folder, frames):
    (found,) = heard(folder / "short.wav", pluck()[:frames], load_design("no-chain"), search=False)
    assert found.bias.audibility.padded
    assert found.bias.audibility.frames == 1


def test_clipping_throughout_is_all_distortion_and_not_the_bias(folder):
    design = replace(load_design("full-chain"), **{"input.gain_db": 20.0})
    (found,) = heard(folder / "loud.wav", pluck(0.8, 0.6, 1.0), design, search=False)
    assert found.everything.audibility.verdict is Verdict.AUDIBLE
    assert found.everything.audibility.nmr_p95_db > found.bias.audibility.nmr_p95_db + 20.0
    assert any("hearing is at risk" in note for note in found.bias.audibility.notes)


def test_the_residual_is_handed_out_as_it_was_heard(folder, unbiased):
    parts: list[Residual] = []
    (found,) = heard(
        folder / "tap.wav", pluck(), load_design("no-chain"), search=False, tap=parts.append
    )
    reference = np.concatenate([part.reference for part in parts])
    residual = np.concatenate([part.residual for part in parts])
    assert residual.size == pluck().size
    share = 10.0 * np.log10(np.sum(residual**2) / np.sum((reference + residual) ** 2))
    assert share == pytest.approx(found.bias.match.residual_db, abs=0.1)
    assert found.bias.match.residual_db == unbiased.bias.match.residual_db


def test_tables_and_frames_hold_the_same_figures(unbiased):
    tables = verdict_tables(unbiased)
    assert tables[0].rows[0][1] == "audible"
    assert tables[0].rows[0][3] == unbiased.bias.audibility.nmr_p95_db
    assert len(tables[1].rows) == 4
    rows = list(csv.DictReader(io.StringIO(frames_csv([unbiased]))))
    assert len(rows) == unbiased.bias.series.frames
    worst = max(float(row["bias_nmr_max_db"]) for row in rows if row["active"] == "1")
    assert worst == pytest.approx(unbiased.bias.audibility.nmr_max_db, abs=1e-3)


def test_the_command_prints_and_writes(folder, monkeypatch):
    monkeypatch.chdir(folder)
    sf.write("short_pluck.wav", pluck(0.5), RATE)
    asked = ["audible", "short_pluck.wav", "-d", "no-chain", "--cabinet", "open-back-12"]
    shown = CliRunner().invoke(commands, [*asked, "--csv", "frames.csv"])
    assert shown.exit_code == 0, shown.output
    for text in ("what the bias adds", "all distortion", "quietest quarter", "open-back-12"):
        assert text in shown.stdout
    assert Path("frames.csv").read_text().startswith("recording,channel,time_s")
    told = json.loads(CliRunner().invoke(commands, [*asked, "--json"]).stdout)["auditions"][0]
    assert told["bias"]["audibility"]["verdict"] == "audible"
    assert told["unsettled_steps"] == 0


def test_the_residual_is_written_with_its_boost(folder, monkeypatch):
    monkeypatch.chdir(folder)
    sf.write("half.wav", pluck(0.5), RATE, "DOUBLE")
    asked = ["audible", "half.wav", "-d", "no-chain", "--residual"]
    for name, boost in (("r0.wav", "0"), ("r20.wav", "20")):
        shown = CliRunner().invoke(commands, [*asked, name, "--boost", boost])
        assert shown.exit_code == 0, shown.output
        assert f"boosted by {boost} dB, 0 sample(s) clipped" in shown.stdout
    plain, rate = sf.read("r0.wav")
    boosted, _ = sf.read("r20.wav")
    assert (rate, plain.size) == (RATE, pluck(0.5).size)
    assert np.std(plain) > 0.0
    np.testing.assert_allclose(boosted, 10.0 * plain, atol=11.0 * 2.0**-24)  # 24 bits each
    again = CliRunner().invoke(commands, [*asked, "r0.wav"])
    assert again.exit_code == 13
    assert "r0.wav exists" in again.output


@pytest.mark.parametrize(
    ("more", "said"),
    [
        (["--residual", "nowhere/r.wav"], "does not exist"),
        (["--spl", "loud"], "--spl"),
        (["--room", "quiet"], "--room"),
        (["--channel", "0"], "--channel is 0, channels are counted from 1"),
        (["--csv", "nowhere/frames.csv"], "does not exist"),
        (["--cabinet", "shoebox"], "shoebox"),
    ],
)
def test_bad_options_are_one_sentence(folder, monkeypatch, more, said):
    monkeypatch.chdir(folder)
    sf.write("x.wav", pluck(0.2), RATE)
    result = CliRunner().invoke(commands, ["audible", "x.wav", "-d", "no-chain", *more])
    assert result.exit_code not in (0, 1)
    assert said in result.output
    assert len(result.output.strip().splitlines()) == 1
