"""From a recording and a design to a file and its report."""

import hashlib
import itertools
import json
import math
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pyloudnorm
import pytest
import soundfile as sf
from conftest import make_design

from tonesim import render as render_module
from tonesim.design import Design
from tonesim.designfile import design_key, list_presets, load_design, replace
from tonesim.errors import OutputError, RecordingError, SolverError, UsageError
from tonesim.processor import Amplifier
from tonesim.render import (
    HEADROOM_V,
    OVERSHOOT,
    cabinet_response,
    output_full_scale,
    perform,
    render,
)
from tonesim.report import RenderOptions, RenderReport, check_output
from tonesim.signals import Signal, burst, sine, square
from tonesim.wav import open_recording

RATE = 48_000


def linear_design() -> Design:
    """No crossover, resistive load, no cabinet: linear far below clipping."""
    two = ["1N4148", "1N4148"]
    return make_design({"bias.upper": two, "bias.lower": two})


def with_cabinet(design: Design) -> Design:
    return replace(design, cabinet={"part": "open-back-12"})


def record(path: Path, x: Signal, rate: int = RATE, subtype: str = "PCM_24") -> Path:
    sf.write(path, x, rate, subtype=subtype)
    return path


def plucks(frames: int = 12_000, rate: int = RATE, peak: float = 0.3) -> Signal:
    """Decaying harmonics of a low string (invented)."""
    t = np.arange(frames) / rate
    partials = [np.sin(2.0 * np.pi * 110.0 * k * t) * np.exp(-3.0 * k * t) / k for k in range(1, 9)]
    x = np.asarray(sum(partials))
    return peak * x / np.max(np.abs(x))


def volts(report: RenderReport) -> Signal:
    y, _ = sf.read(report.output, always_2d=True)
    return np.asarray(y) * report.output_full_scale_v


@pytest.mark.parametrize("rate", [8000, 22_050, 44_100, 96_000, 192_000, 384_000])
def test_the_result_is_aligned_to_the_sample_at_every_rate(tmp_path, rate):
    x = burst(min(rate / 40.0, 2000.0), 0.02, rate, 1200, 400, 800)
    report = render(
        record(tmp_path / "in.wav", x, rate, "DOUBLE"),
        tmp_path / "out.wav",
        linear_design(),
        RenderOptions(subtype="double"),
    )
    y = volts(report)[:, 0]
    assert y.shape == x.shape
    # The lag is that of the largest correlation; the op-amp's own delay is far below a sample.
    lags = np.arange(-30, 31)
    products = [float(x[40:-40] @ y[40 + lag : y.size - 40 + lag]) for lag in lags]
    assert lags[int(np.argmax(products))] == 0
    assert report.performance.stage_latency_frames > 0 or rate > 300_000


def test_with_a_cabinet_the_result_is_the_cabinet_s_own_answer(tmp_path):
    frames, at = 6000, 1000
    x = np.zeros(frames)
    x[at] = 0.001
    design = linear_design()
    bare = volts(
        render(
            record(tmp_path / "in.wav", x, subtype="DOUBLE"),
            tmp_path / "bare.wav",
            design,
            RenderOptions(subtype="double"),
        )
    )[:, 0]
    report = render(
        tmp_path / "in.wav",
        tmp_path / "cab.wav",
        with_cabinet(design),
        RenderOptions(subtype="double"),
    )
    response, latency = cabinet_response(report.design, RATE) or (np.zeros(0), 0)
    expected = np.convolve(bare, response)[latency : latency + frames]
    np.testing.assert_allclose(volts(report)[:, 0], expected, atol=1e-9)
    assert report.performance.cabinet_latency_frames == latency > 0


def test_an_offset_makes_no_thump_in_the_cabinet(tmp_path):
    design = with_cabinet(replace(load_design("lopsided-rails"), **{"driver.offset_v": 0.003}))
    report = render(
        record(tmp_path / "in.wav", np.zeros(4000)),
        tmp_path / "out.wav",
        design,
        RenderOptions(subtype="double"),
    )
    assert abs(report.performance.evidence[0].highest_v) > 0.01
    assert np.max(np.abs(volts(report))) < 1e-4


def test_the_result_is_the_voltage_of_the_stage(tmp_path):
    x = plucks()
    report = render(
        record(tmp_path / "in.wav", x, subtype="DOUBLE"),
        tmp_path / "out.wav",
        linear_design(),
        RenderOptions(subtype="double"),
    )
    stage = Amplifier(linear_design())
    stage.prepare(RATE, 1000)
    fed = np.append(x * report.input_full_scale_v, np.zeros(stage.latency))
    np.testing.assert_allclose(
        volts(report)[:, 0], stage.process(fed)[stage.latency :], rtol=0.0, atol=1e-12
    )


def test_any_block_size_gives_equal_bits(tmp_path):
    source = record(tmp_path / "in.wav", np.column_stack([plucks(3000), -plucks(3000)]))
    files = []
    for size in (64, 501, 8192):
        out = tmp_path / f"{size}.wav"
        options = RenderOptions(block_frames=size, match_lufs=-23.0)
        render(source, out, with_cabinet(load_design("small-saggy-transformer")), options)
        files.append(out.read_bytes())
    assert files[0] == files[1] == files[2]


def test_each_channel_of_a_stereo_recording_equals_its_own_render(tmp_path):
    left, right = plucks(4000), 0.1 * plucks(4000)[::-1]
    source = record(tmp_path / "in.wav", np.column_stack([left, right]))
    design = load_design("partial-chain")
    both = render(source, tmp_path / "both.wav", design)
    y, _ = sf.read(both.output, dtype="int32")
    assert y.shape == (4000, 2)
    for channel in (0, 1):
        one = render(source, tmp_path / f"{channel}.wav", design, RenderOptions(channel=channel))
        alone, _ = sf.read(one.output, dtype="int32")
        np.testing.assert_array_equal(alone, y[:, channel])
        assert one.performance.evidence[0] == both.performance.evidence[channel]


def test_three_channels_are_refused_unless_one_is_chosen(tmp_path):
    source = record(tmp_path / "in.wav", np.zeros((500, 3)))
    with pytest.raises(RecordingError, match="3 channels, expected one or two"):
        render(source, tmp_path / "out.wav", linear_design())
    with pytest.raises(UsageError, match="no channel 4"):
        render(source, tmp_path / "out.wav", linear_design(), RenderOptions(channel=3))
    assert list(tmp_path.iterdir()) == [source]
    report = render(source, tmp_path / "out.wav", linear_design(), RenderOptions(channel=2))
    assert report.channels == 1


@pytest.mark.parametrize(
    ("ending", "subtype"),
    [
        ("wav", "PCM_16"),
        ("wav", "PCM_24"),
        ("wav", "FLOAT"),
        ("flac", "PCM_24"),
        ("aiff", "PCM_16"),
        ("ogg", "VORBIS"),
    ],
)
def test_every_format_is_read_and_written(tmp_path, ending, subtype):
    source = tmp_path / f"in.{ending}"
    sf.write(source, plucks(5000), 44_100, subtype=subtype)
    report = render(source, tmp_path / f"out.{ending}", linear_design())
    info = sf.info(report.output)
    assert (info.frames, info.samplerate, info.channels) == (5000, 44_100, 1)
    assert info.subtype == ("VORBIS" if ending == "ogg" else "PCM_24")


@pytest.mark.parametrize("preset", ["no-chain", "full-chain"])
def test_a_matched_result_has_the_loudness_asked_for(tmp_path, preset):
    source = record(tmp_path / "in.wav", np.tile(plucks(RATE // 2), 4))
    options = RenderOptions(match_lufs=-24.0)
    report = render(source, tmp_path / "out.wav", load_design(preset), options)
    y, _ = sf.read(report.output)
    # Rec. ITU-R BS.1770, as pyloudnorm computes it.
    assert pyloudnorm.Meter(RATE).integrated_loudness(y) == pytest.approx(-24.0, abs=0.1)
    assert report.loudness_lufs == pytest.approx(-24.0)
    assert not report.match_limited
    # The voltage is the same as without matching.
    plain = render(source, tmp_path / "plain.wav", load_design(preset))
    np.testing.assert_allclose(volts(report), volts(plain), atol=2e-5)


def test_matching_stops_below_the_true_peak_ceiling_and_says_so(tmp_path):
    x = np.zeros(RATE)
    x[1000:1040] = 0.05  # a click: little loudness, much peak
    source = record(tmp_path / "in.wav", x)
    report = render(source, tmp_path / "out.wav", linear_design(), RenderOptions(match_lufs=-10.0))
    assert report.match_limited
    assert report.true_peak_db == pytest.approx(-1.0, abs=1e-9)
    assert report.loudness_lufs < -10.0
    y, _ = sf.read(report.output)
    assert np.max(np.abs(y)) <= 10.0 ** (-1.0 / 20.0) + 2.0**-23


def test_silence_can_be_matched_and_stays_silent(tmp_path):
    source = record(tmp_path / "in.wav", np.zeros(RATE // 2))
    options = RenderOptions(match_lufs=-20.0)
    report = render(source, tmp_path / "out.wav", load_design("no-chain"), options)
    y, _ = sf.read(report.output)
    assert np.max(np.abs(y)) < 1e-9
    assert report.match_gain_db == 0.0
    assert json.loads(report.sidecar.read_text())["loudness_lufs"] is None


def test_the_sidecar_tells_all(tmp_path):
    source = record(tmp_path / "take one.wav", plucks(4000))
    design = load_design("full-chain", ["input.full_scale_v=2.5", "input.gain_db=6"])
    report = render(source, tmp_path / "out.wav", design, RenderOptions(subtype="16"))
    data = json.loads((tmp_path / "out.json").read_text(encoding="utf-8"))
    assert data == json.loads(json.dumps(report.as_dict()))
    assert data["design"] == design.model_dump(mode="json")
    assert data["design_key_sha256"] == design_key(design)
    assert data["recording"]["name"] == "take one.wav"
    assert data["recording"]["sha256"] == hashlib.sha256(source.read_bytes()).hexdigest()
    assert data["recording"]["sample_rate_hz"] == RATE
    assert data["recording"]["frames"] == 4000
    assert data["input_full_scale_v"] == 2.5
    assert data["options"]["subtype"] == "16"
    assert data["oversampling_factor"] == 8
    latency = data["stage_latency_removed_frames"] + data["cabinet_latency_removed_frames"]
    (channel,) = data["per_channel"]
    assert channel["steps"] == (4000 + latency) * 8
    assert channel["iterations"] >= channel["steps"]
    assert channel["unsettled_steps"] == 0
    assert channel["peak_v"] == max(channel["highest_v"], -channel["lowest_v"])
    assert 0.0 < channel["lowest_positive_rail_v"] < design.supply.open_positive_v
    assert data["clipped_samples"] == 0
    assert data["real_time_factor"] == pytest.approx(4000 / RATE / data["run_s"])


def test_the_design_in_a_sidecar_renders_to_the_same_bits(tmp_path):
    from tonesim.designfile import build_design

    source = record(tmp_path / "in.wav", plucks(3000))
    first = render(source, tmp_path / "a.wav", load_design("no-chain", ["bias.temperature_c=40"]))
    again = build_design(json.loads(first.sidecar.read_text())["design"])
    second = render(source, tmp_path / "b.wav", again)
    assert first.output.read_bytes() == second.output.read_bytes()
    assert first.design_key_sha256 == second.design_key_sha256


def test_full_scale_of_the_result_is_the_same_for_all_bias_chains():
    figures = {
        output_full_scale(design, cabinet_response(design, RATE))
        for design in map(load_design, ("no-chain", "partial-chain", "full-chain"))
    }
    assert len(figures) == 1
    bare = linear_design()
    assert output_full_scale(bare, None) == OVERSHOOT * (15.0 + HEADROOM_V)


def peak_of(source: Path, design: Design) -> float:
    blocks: list[Signal] = []
    with open_recording(source) as recording:
        perform(recording, design, RenderOptions(), blocks.append)
    return float(np.max(np.abs(np.concatenate(blocks))))


@pytest.mark.slow
@pytest.mark.parametrize(("rate", "cabinet"), [*itertools.product((8000, 48_000), (False, True))])
def test_nothing_clips_at_the_default_full_scale(tmp_path, rng, rate, cabinet):
    frames = rate // 8
    waves = [square(f, 0.99, rate, frames) for f in (41.0, 333.0, 2700.0)]
    noise = rng.uniform(-0.99, 0.99, frames)
    source = record(tmp_path / "in.wav", np.concatenate([*waves, noise]), rate, "DOUBLE")
    for preset in list_presets():
        design = load_design(preset, ["input.gain_db=20", *([] if cabinet else ["cabinet="])])
        assert (design.cabinet is not None) == cabinet
        assert peak_of(source, design) < 1.0, preset


def test_clipped_samples_are_counted(tmp_path):
    source = record(tmp_path / "in.wav", sine(1000.0, 0.1, RATE, 4000))
    options = RenderOptions(output_full_scale_v=1.0)
    report = render(source, tmp_path / "out.wav", linear_design(), options)
    assert report.output_full_scale_v == 1.0
    assert report.clipped_samples > 1000
    assert report.peak_db > 0.0
    y, _ = sf.read(report.output)
    assert np.count_nonzero(np.abs(y) > 1.0 - 2.0**-22) == report.clipped_samples


def test_samples_that_are_not_finite_are_named_or_repaired(tmp_path):
    x = plucks(3000)
    x[1234] = np.nan
    source = record(tmp_path / "in.wav", x, subtype="DOUBLE")
    with pytest.raises(RecordingError, match="nan instead of a sample in frame 1234"):
        render(source, tmp_path / "out.wav", linear_design())
    assert list(tmp_path.iterdir()) == [source]
    report = render(source, tmp_path / "out.wav", linear_design(), RenderOptions(repair=True))
    assert report.performance.repaired_samples == 1
    x[1234] = 0.0
    same = render(
        record(tmp_path / "zero.wav", x, subtype="DOUBLE"), tmp_path / "z.wav", linear_design()
    )
    assert report.output.read_bytes() == same.output.read_bytes()


def test_a_result_is_replaced_only_if_its_sidecar_says_who_wrote_it(tmp_path):
    source = record(tmp_path / "in.wav", plucks(2000))
    out = tmp_path / "out.wav"
    render(source, out, linear_design())
    first = out.read_bytes()
    render(source, out, load_design("no-chain"))
    assert out.read_bytes() != first
    (tmp_path / "out.json").unlink()
    kept = out.read_bytes()
    with pytest.raises(OutputError, match=r"out\.wav exists and out\.json does not say"):
        render(source, out, linear_design())
    assert out.read_bytes() == kept
    assert not (tmp_path / "out.json").exists()
    render(source, out, linear_design(), RenderOptions(replace=True))
    assert out.read_bytes() == first


@pytest.mark.parametrize("text", ["", "[]", "7", '{"kind": "tonesim render"}', '{"my": "notes"}'])
def test_a_foreign_json_is_left_alone(tmp_path, text):
    source = record(tmp_path / "in.wav", plucks(500))
    (tmp_path / "out.json").write_text(text)
    with pytest.raises(OutputError, match=r"out\.json exists"):
        render(source, tmp_path / "out.wav", linear_design())
    assert (tmp_path / "out.json").read_text() == text


def test_an_input_is_never_written_over(tmp_path):
    source = record(tmp_path / "in.wav", plucks(500))
    before = source.read_bytes()
    (tmp_path / "link.wav").symlink_to(source)
    response = record(tmp_path / "cab.wav", np.array([1.0, 0.5]))
    design = replace(linear_design(), cabinet={"file": str(response)})
    for out in (source, tmp_path / "link.wav", response):
        with pytest.raises(OutputError, match="inputs are never overwritten"):
            render(source, out, design, RenderOptions(replace=True))
    assert source.read_bytes() == before


def test_an_impulse_response_file_is_the_cabinet(tmp_path):
    source = record(tmp_path / "in.wav", plucks(2000), subtype="DOUBLE")
    response = record(tmp_path / "cab.wav", np.array([0.0, 0.0, 0.25]), subtype="DOUBLE")
    double = RenderOptions(subtype="double")
    plain = render(source, tmp_path / "plain.wav", linear_design(), double)
    design = replace(linear_design(), cabinet={"file": str(response)})
    heard = render(source, tmp_path / "heard.wav", design, double)
    # What rings before the first frame is lost without the delay, so the comparison begins at it.
    np.testing.assert_allclose(volts(heard)[2:, 0], 0.25 * volts(plain)[:-2, 0], atol=1e-12)
    # Its bytes, not its path, make the key.
    moved = tmp_path / "moved.wav"
    moved.write_bytes(response.read_bytes())
    assert design_key(replace(design, cabinet={"file": str(moved)})) == heard.design_key_sha256


def test_a_failure_on_the_way_leaves_nothing(tmp_path, monkeypatch):
    source = record(tmp_path / "in.wav", plucks(60_000))

    def stop(share: float) -> None:
        if share > 0.5:
            raise KeyboardInterrupt

    for options in (RenderOptions(), RenderOptions(match_lufs=-20.0)):
        with pytest.raises(KeyboardInterrupt):
            render(source, tmp_path / "out.wav", linear_design(), options, stop)
        assert list(tmp_path.iterdir()) == [source]
    monkeypatch.setattr(render_module, "write_sidecar", lambda report: 1 / 0)
    with pytest.raises(ZeroDivisionError):
        render(source, tmp_path / "out.wav", linear_design())
    assert list(tmp_path.iterdir()) == [source]


def test_an_old_result_survives_a_failed_render(tmp_path):
    source = record(tmp_path / "in.wav", plucks(20_000))
    out = tmp_path / "out.wav"
    render(source, out, linear_design())
    before = {path.name: path.read_bytes() for path in tmp_path.iterdir()}

    def stop(share: float) -> None:
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        render(source, out, load_design("no-chain"), None, stop)
    assert {path.name: path.read_bytes() for path in tmp_path.iterdir()} == before


def test_a_disk_without_room_for_the_first_pass_is_named(tmp_path, monkeypatch):
    source = record(tmp_path / "in.wav", plucks(20_000))

    class Full:
        def write(self, data: bytes) -> int:
            raise OSError(28, "No space left on device")

    monkeypatch.setattr(
        render_module,
        "_put",
        lambda file, block, out, put=render_module._put: put(Full(), block, out),
    )
    with pytest.raises(OutputError, match=r"temporary file beside it .* No space left"):
        render(source, tmp_path / "out.wav", linear_design(), RenderOptions(match_lufs=-20.0))
    assert list(tmp_path.iterdir()) == [source]


def test_a_stage_that_cannot_idle_writes_nothing(tmp_path, monkeypatch):
    import dataclasses

    from tonesim import stage

    idle = stage.idle_point
    monkeypatch.setattr(
        stage, "idle_point", lambda c: dataclasses.replace(idle(c), converged=False)
    )
    source = record(tmp_path / "in.wav", plucks(500))
    with pytest.raises(SolverError, match="finds no idle point"):
        render(source, tmp_path / "out.wav", linear_design())
    assert list(tmp_path.iterdir()) == [source]


def test_progress_rises_to_one(tmp_path):
    source = record(tmp_path / "in.wav", plucks(30_000))
    for options in (RenderOptions(), RenderOptions(match_lufs=-20.0)):
        told: list[float] = []
        render(source, tmp_path / "out.wav", linear_design(), options, told.append)
        assert told == sorted(told)
        assert told[-1] == pytest.approx(1.0)


@pytest.mark.parametrize(
    "wrong",
    [
        {"match_lufs": 1.0},
        {"match_lufs": math.nan},
        {"match_lufs": -70.0},
        {"output_full_scale_v": 0.0},
        {"output_full_scale_v": math.inf},
        {"output_full_scale_v": 5.0, "match_lufs": -20.0},
        {"block_frames": 0},
    ],
)
def test_options_outside_their_range_are_refused(wrong):
    with pytest.raises(UsageError, match="expected"):
        RenderOptions(**wrong)


def test_a_name_that_is_no_text_still_gives_a_sidecar(tmp_path):
    name = os.fsdecode(b"take\xff.wav")
    source = record(tmp_path / "in.wav", plucks(500)).rename(tmp_path / name)
    report = render(source, tmp_path / "out.wav", linear_design())
    assert json.loads(report.sidecar.read_text())["recording"]["name"] == name


def test_outputs_are_checked_without_touching_them(tmp_path):
    check_output(tmp_path / "new.wav", [tmp_path / "missing.wav"], linear_design())
    assert list(tmp_path.iterdir()) == []


_PEAK = """
import resource, sys
from pathlib import Path
from tonesim.designfile import load_design
from tonesim.render import RenderOptions, render
folder = Path(sys.argv[1])
options = RenderOptions(match_lufs=-20.0)
render(folder / sys.argv[2], folder / "out.wav", load_design("no-chain"), options)
print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)
"""


@pytest.mark.slow
def test_a_long_recording_needs_no_more_memory_than_a_short_one(tmp_path):
    pytest.importorskip("resource")
    peaks = []
    for seconds in (10, 120):
        record(tmp_path / f"{seconds}.wav", np.tile(plucks(8000, 8000), seconds), 8000)
        done = subprocess.run(
            [sys.executable, "-c", _PEAK, str(tmp_path), f"{seconds}.wav"],
            capture_output=True,
            text=True,
            check=True,
        )
        peaks.append(int(done.stdout) / 1024)  # kB on Linux
    assert abs(peaks[1] - peaks[0]) < 50.0
