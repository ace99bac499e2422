"""The demo: equally loud, and its figures are those of its own files."""

import json
from pathlib import Path

import numpy as np
import pyloudnorm
import pytest
import soundfile as sf
from conftest import make_design

from tonesim import demo as demo_module
from tonesim.demo import PRESETS, REFERENCE, DemoReport, run_demo, total_distortion
from tonesim.designfile import load_design
from tonesim.errors import OutputError, RecordingError
from tonesim.processor import Amplifier

RATE = 48_000


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Two invented recordings: one that dies away slowly, one that is loud to the end."""
    made = tmp_path_factory.mktemp("recordings")
    t = np.arange(2 * RATE) / RATE
    tone = np.sin(2 * np.pi * 587.0 * t) + 0.3 * np.sin(2 * np.pi * 2349.0 * t)
    sf.write(made / "dying.wav", 0.25 * tone * np.exp(-3.0 * t), RATE, "PCM_24")
    sf.write(made / "steady.wav", 0.1 * tone, RATE, "PCM_24")
    return made


@pytest.fixture(scope="module")
def told(folder: Path, tmp_path_factory: pytest.TempPathFactory) -> DemoReport:
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(demo_module, "demo_audio_folder", lambda: folder)
        return run_demo(tmp_path_factory.mktemp("out"))


def test_the_presets_differ_in_their_chain_only():
    designs = [load_design(preset) for preset in PRESETS]
    rest = [design.model_dump(exclude={"title", "notes", "bias"}) for design in designs]
    assert rest[0] == rest[1] == rest[2]
    assert len({design.bias.model_dump_json() for design in designs}) == 3


def test_all_results_are_equally_loud_and_below_the_ceiling(told):
    assert len(told.heard) == 6
    for each in told.heard:
        y, rate = sf.read(each.report.output)
        # Rec. ITU-R BS.1770, as pyloudnorm computes it.
        found = pyloudnorm.Meter(rate).integrated_loudness(y)
        assert found == pytest.approx(told.loudness_lufs, abs=0.1)
        assert each.report.true_peak_db <= -1.0 + 1e-9
        assert each.report.clipped_samples == 0
        data = json.loads(each.report.sidecar.read_text())
        assert data["design"]["title"] == load_design(each.preset).title


def test_the_distance_is_that_of_the_written_files(told):
    by_name = {(each.recording, each.preset): each for each in told.heard}
    each = by_name["dying.wav", "no-chain"]
    x, _ = sf.read(by_name["dying.wav", REFERENCE].report.output)
    y, _ = sf.read(each.report.output)
    y = y * (x @ y) / (y @ y)
    tail = slice(round(each.quiet_from_s * RATE), round(each.quiet_to_s * RATE))
    ratio = 10.0 * np.log10(np.sum((y - x)[tail] ** 2) / np.sum(x[tail] ** 2))
    assert each.quiet_db == pytest.approx(ratio, abs=1.5)
    assert each.quiet_from_s > 1.0
    assert by_name["dying.wav", REFERENCE].quiet_db is None


def test_the_tail_tells_less_bias(told):
    by_name = {(each.recording, each.preset): each for each in told.heard}
    none = by_name["dying.wav", "no-chain"]
    one = by_name["dying.wav", "partial-chain"]
    assert none.quiet_db > none.loud_db + 3.0  # crossover is worst where the music is quiet
    assert none.quiet_db > one.quiet_db + 3.0
    idle = [variant.idle_a for variant in told.variants]
    assert idle == sorted(idle)
    quiet = [variant.thd_percent[1] for variant in told.variants]
    assert quiet == sorted(quiet, reverse=True)


def test_the_report_is_plain_data(told):
    data = json.loads(json.dumps(told.as_dict()))
    assert [variant["preset"] for variant in data["variants"]] == list(PRESETS)
    assert all(Path(result["output"]).is_file() for result in data["results"])


def test_distortion_of_a_clipped_sine_is_that_of_its_series():
    """Far beyond clipping a stage makes a trapezoid, close to a square wave.

    An ideal square wave has odd harmonics 1/n: up to the 20th, 43.5 % of the fundamental.
    """
    two = ["1N4148", "1N4148"]
    stage = Amplifier(make_design({"bias.upper": two, "bias.lower": two}))
    stage.prepare(RATE, 4800)
    odd = np.arange(3, 21, 2)
    assert total_distortion(stage, 100.0) == pytest.approx(
        float(np.sqrt(np.sum(1.0 / odd**2))), rel=0.1
    )
    assert total_distortion(stage, 0.1) < 1e-3


def test_without_recordings_the_demo_says_so(tmp_path, monkeypatch):
    monkeypatch.setattr(demo_module, "demo_audio_folder", lambda: tmp_path)
    with pytest.raises(RecordingError, match="no recordings are found"):
        run_demo(tmp_path)


def test_a_file_of_other_origin_stops_the_demo_before_it_begins(folder, tmp_path, monkeypatch):
    monkeypatch.setattr(demo_module, "demo_audio_folder", lambda: folder)
    (tmp_path / "steady.full-chain.wav").write_bytes(b"mine")
    with pytest.raises(OutputError, match=r"steady\.full-chain\.wav exists"):
        run_demo(tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == ["steady.full-chain.wav"]


def test_an_interrupted_demo_leaves_no_unfinished_file(folder, tmp_path, monkeypatch):
    monkeypatch.setattr(demo_module, "demo_audio_folder", lambda: folder)

    def stop(share: float) -> None:
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        run_demo(tmp_path, stop)
    assert list(tmp_path.iterdir()) == []


def test_a_failure_in_one_thread_ends_the_demo(folder, tmp_path, monkeypatch):
    monkeypatch.setattr(demo_module, "demo_audio_folder", lambda: folder)

    def fail(*args: object) -> None:
        raise RecordingError("no more")

    monkeypatch.setattr(demo_module, "perform", fail)
    with pytest.raises(RecordingError, match="no more"):
        run_demo(tmp_path)
    assert list(tmp_path.iterdir()) == []
