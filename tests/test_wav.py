"""Recordings: what is read, what is refused and how, and that outputs are whole or absent."""

import os
import wave

import numpy as np
import pytest
import soundfile as sf
from hypothesis import given, settings
from hypothesis import strategies as st

from tonesim import wav
from tonesim.errors import OutputError, RecordingError, UsageError
from tonesim.signals import sine
from tonesim.wav import (
    create_recording,
    open_recording,
    read_impulse_response,
    refuse_same_file,
    write_text_aside,
)

RATE = 48_000


def noise(frames=5000, channels=2, seed=1):
    return np.random.default_rng(seed).uniform(-0.9, 0.9, (frames, channels))


def put(path, x, rate=RATE, **options):
    with create_recording(path, rate, np.atleast_2d(x.T).shape[0], **options) as writer:
        writer.write(x)
    return writer


def get(path, **options):
    with open_recording(path, **options) as recording:
        return np.concatenate(list(recording.blocks(1000)))


def names_in(folder):
    return sorted(entry.name for entry in folder.iterdir())


# Reading


@pytest.mark.parametrize(
    ("ending", "kind"),
    [
        ("wav", "PCM_16"),
        ("wav", "DOUBLE"),
        ("flac", "PCM_24"),
        ("aiff", "PCM_16"),
        ("caf", "FLOAT"),
        ("w64", "PCM_24"),
        ("ogg", "VORBIS"),
        ("mp3", "MPEG_LAYER_III"),
    ],
)
def test_blocks_hold_what_the_library_reads_at_once(tmp_path, ending, kind):
    path = tmp_path / f"a.{ending}"
    sf.write(path, noise(30_000), RATE, kind)
    with open_recording(path) as recording:
        blocks = list(recording.blocks(777))
        assert recording.info.subtype == kind
    assert all(block.shape == (777, 2) for block in blocks[:-1])
    np.testing.assert_allclose(np.concatenate(blocks), sf.read(path)[0], rtol=0, atol=1e-6)


def test_a_recording_says_what_it_is(tmp_path):
    sf.write(tmp_path / "a.wav", noise(24_000), RATE, "PCM_24")
    with open_recording(tmp_path / "a.wav") as recording:
        info = recording.info
    assert (info.sample_rate, info.frames, info.channels) == (RATE, 24_000, 2)
    assert (info.format, info.subtype, info.duration_s) == ("WAV", "PCM_24", 0.5)


def test_one_channel_can_be_chosen_and_reading_can_begin_again(tmp_path):
    sf.write(tmp_path / "a.wav", noise(), RATE, "DOUBLE")
    with open_recording(tmp_path / "a.wav") as recording:
        for channel in (1, 0):
            x = np.concatenate(list(recording.blocks(999, channel=channel)))
            np.testing.assert_array_equal(x, noise()[:, [channel]])
        with pytest.raises(UsageError, match=r"2 channel\(s\), so there is no channel 3"):
            recording.blocks(999, channel=2)
        with pytest.raises(UsageError, match="block_size is 0"):
            recording.blocks(0)


def refused(path, sentence):
    with pytest.raises(RecordingError, match=sentence) as caught, open_recording(path):
        pass
    assert str(path) in str(caught.value)


def test_what_is_no_file_is_refused_by_name(tmp_path):
    refused(tmp_path / "none.wav", "does not exist")
    (tmp_path / "file").touch()
    refused(tmp_path / "file" / "a.wav", "does not exist")
    refused(tmp_path, "is a folder")


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="no named pipes here")
def test_a_pipe_or_device_is_refused_without_waiting(tmp_path):
    os.mkfifo(tmp_path / "pipe.wav")
    refused(tmp_path / "pipe.wav", "pipe or a device")
    if os.path.exists("/dev/zero"):
        with pytest.raises(RecordingError, match="pipe or a device"):
            open_recording("/dev/zero")


def test_a_file_without_permission_is_refused(tmp_path, monkeypatch):
    sf.write(tmp_path / "a.wav", noise(), RATE)

    def denied(*_args, **_options):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("pathlib.Path.open", denied)
    refused(tmp_path / "a.wav", "permission denied")


@pytest.mark.parametrize(
    ("name", "contents"), [("text.wav", b"dear reader"), ("empty.wav", b""), ("noise.flac", b"xy")]
)
def test_what_is_no_recording_is_refused(tmp_path, name, contents):
    (tmp_path / name).write_bytes(contents)
    refused(tmp_path / name, "not a recording that can be read: Format not recognised")


def test_a_headerless_file_is_refused(tmp_path):
    (tmp_path / "a.raw").write_bytes(bytes(4000))
    refused(tmp_path / "a.raw", "no sample rate")


def test_a_recording_without_samples_is_refused(tmp_path):
    sf.write(tmp_path / "a.wav", np.zeros((0, 1)), RATE)
    refused(tmp_path / "a.wav", "holds no samples")


@pytest.mark.parametrize("rate", [4000, 7999, 384_001, 768_000])
def test_a_rate_outside_8_to_384_khz_is_refused(tmp_path, rate):
    sf.write(tmp_path / "a.wav", noise(), rate)
    refused(tmp_path / "a.wav", f"sample rate of {rate} Hz; 8000 to 384000 Hz")


@pytest.mark.parametrize("rate", [8000, 384_000])
def test_the_border_rates_are_read(tmp_path, rate):
    sf.write(tmp_path / "a.wav", noise(), rate)
    assert get(tmp_path / "a.wav").shape == (5000, 2)


@pytest.mark.parametrize(
    ("ending", "options"),
    [
        ("wav", {"subtype": "PCM_24"}),
        ("wav", {"subtype": "FLOAT"}),
        ("wav", {"subtype": "PCM_16", "format": "RF64"}),
        ("aiff", {"subtype": "PCM_24"}),
        ("w64", {"subtype": "PCM_24"}),
        ("flac", {"subtype": "PCM_16"}),
        ("caf", {"subtype": "FLOAT"}),
        ("ogg", {"subtype": "VORBIS"}),
        ("mp3", {"subtype": "MPEG_LAYER_III"}),
    ],
)
def test_a_recording_cut_short_is_refused(tmp_path, ending, options):
    path = tmp_path / f"a.{ending}"
    sf.write(path, noise(100_000), RATE, **options)
    whole = path.read_bytes()
    assert get(path).shape == (100_000, 2)
    path.write_bytes(whole[: len(whole) // 2])
    with pytest.raises(RecordingError, match=r"cut short|damaged|malformed"):
        get(path)


def test_a_header_of_unknown_length_is_read_to_the_end(tmp_path):
    # Programs that write to a pipe cannot go back and fill in the sizes: all ones, common practice.
    sf.write(tmp_path / "a.wav", noise(), RATE, "PCM_16")
    contents = bytearray((tmp_path / "a.wav").read_bytes())
    at = contents.find(b"data")
    contents[4:8] = contents[at + 4 : at + 8] = b"\xff\xff\xff\xff"
    (tmp_path / "a.wav").write_bytes(contents)
    assert get(tmp_path / "a.wav").shape == (5000, 2)


def damaged(tmp_path):
    x = noise()
    x[2400, 1], x[2401, 0], x[4000, 0] = np.nan, np.inf, -np.inf
    sf.write(tmp_path / "a.wav", x, RATE, "DOUBLE")
    return tmp_path / "a.wav", x


def test_a_sample_that_is_not_finite_is_named(tmp_path):
    path, _ = damaged(tmp_path)
    sentence = r"nan instead of a sample in frame 2400 \(0\.0500 s\), channel 2; 2 such"
    with pytest.raises(RecordingError, match=sentence):
        get(path)
    with (
        open_recording(path) as recording,
        pytest.raises(RecordingError, match=r"frame 2401 .* channel 1; 1 such"),
    ):
        list(recording.blocks(1000, channel=0))


def test_samples_that_are_not_finite_are_repaired_on_request(tmp_path):
    path, x = damaged(tmp_path)
    with open_recording(path, repair=True) as recording:
        for _ in range(2):  # counted afresh each time
            y = np.concatenate(list(recording.blocks(1000)))
            assert recording.repaired == 3
    np.testing.assert_array_equal(y, np.where(np.isfinite(x), x, 0.0))


def test_an_impulse_response_is_the_first_channel(tmp_path):
    sf.write(tmp_path / "a.wav", noise(2 * RATE), RATE, "DOUBLE")
    samples, rate = read_impulse_response(tmp_path / "a.wav")
    assert rate == RATE
    np.testing.assert_array_equal(samples, noise(2 * RATE)[:, 0])


def test_an_impulse_response_too_long_or_silent_is_refused(tmp_path):
    sf.write(tmp_path / "long.wav", noise(2 * RATE + 480), RATE)
    with pytest.raises(RecordingError, match=r"lasts 2\.01 s.*up to 2 s"):
        read_impulse_response(tmp_path / "long.wav")
    sf.write(tmp_path / "silent.wav", np.zeros(100), RATE)
    with pytest.raises(RecordingError, match="silent"):
        read_impulse_response(tmp_path / "silent.wav")


# Writing


@pytest.mark.parametrize("name", ["a.wav", "a.flac", "a.aiff", "a.AIF", "a.w64", "a.caf"])
@pytest.mark.parametrize(("kind", "bits"), [("16", 16), ("24", 24)])
def test_integer_files_hold_samples_within_their_step(tmp_path, name, kind, bits):
    put(tmp_path / name, noise(), subtype=kind)
    # Half a step of rounding; the dither of 16-bit files adds up to one.
    allowed = (1.5 if bits == 16 else 0.5) * 2.0 ** (1 - bits)
    assert np.max(np.abs(get(tmp_path / name) - noise())) <= allowed * (1 + 1e-9)
    assert names_in(tmp_path) == [name]


@pytest.mark.parametrize(("kind", "bound"), [("32", 2.0**-32), ("float", 2.0**-25), ("double", 0)])
def test_wider_kinds_hold_samples_as_exactly_as_they_can(tmp_path, kind, bound):
    put(tmp_path / "a.wav", noise(), subtype=kind)
    assert np.max(np.abs(get(tmp_path / "a.wav") - noise())) <= bound


def test_the_standard_library_reads_the_same_codes(tmp_path):
    x = np.array([0.0, 0.25, -0.25, 2.0**-23, -1.0, 1.0 - 2.0**-23])
    put(tmp_path / "a.wav", x)
    with wave.open(str(tmp_path / "a.wav")) as file:
        assert (file.getframerate(), file.getnchannels(), file.getsampwidth()) == (RATE, 1, 3)
        raw = file.readframes(10)
    codes = [int.from_bytes(raw[i : i + 3], "little", signed=True) for i in range(0, 18, 3)]
    assert codes == [0, 2**21, -(2**21), 1, -(2**23), 2**23 - 1]


def test_ogg_is_written_in_vorbis(tmp_path):
    x = sine(440.0, 0.5, RATE, RATE)
    put(tmp_path / "a.ogg", x)
    assert sf.info(tmp_path / "a.ogg").subtype == "VORBIS"
    assert np.sqrt(np.mean((get(tmp_path / "a.ogg")[:, 0] - x) ** 2)) < 0.01


def test_samples_beyond_full_scale_are_clipped_and_counted(tmp_path):
    x = np.array([0.5, 1.0, 1.25, -1.0, -1.5, 1e300])
    for kind, expected in [
        ("24", [0.5, 1.0, 1.0, -1.0, -1.0, 1.0]),
        ("double", list(x)),
    ]:
        writer = put(tmp_path / "a.wav", x, subtype=kind)
        assert writer.clipped_samples == 3
        np.testing.assert_allclose(get(tmp_path / "a.wav")[:, 0], expected, rtol=0, atol=2**-23)


@settings(max_examples=15, deadline=None)
@given(st.lists(st.integers(1, 3000), min_size=1, max_size=5), st.sampled_from(["16", "24"]))
def test_any_cut_writes_the_same_file(tmp_path_factory, sizes, kind):
    folder = tmp_path_factory.mktemp("cut")
    put(folder / "whole.wav", noise(), subtype=kind, seed=5)
    with create_recording(folder / "cut.wav", RATE, 2, subtype=kind, seed=5) as writer:
        start, turn = 0, 0
        while start < 5000:
            stop = start + sizes[turn % len(sizes)]
            writer.write(noise()[start:stop])
            start, turn = stop, turn + 1
    assert (folder / "cut.wav").read_bytes() == (folder / "whole.wav").read_bytes()


def test_the_seed_chooses_the_dither(tmp_path):
    for name, seed in [("a.wav", 1), ("b.wav", 1), ("c.wav", 2)]:
        put(tmp_path / name, noise(), subtype="16", seed=seed)
    a, b, c = ((tmp_path / name).read_bytes() for name in ("a.wav", "b.wav", "c.wav"))
    assert a == b != c


def test_dither_makes_the_rounding_error_independent_of_the_sample(tmp_path):
    # Triangular dither of +-1 step: error of mean 0 and power 1/12 + 1/6 = 1/4 step^2 wherever the
    # sample lies between two steps (Lipshitz et al., J. Audio Eng. Soc. 40(5), 1992; from memory).
    step = 2.0**-15
    for fraction in (0.0, 0.25, 0.5):
        put(tmp_path / "a.wav", np.full(200_000, (100 + fraction) * step), subtype="16")
        error = get(tmp_path / "a.wav")[:, 0] / step - (100 + fraction)
        assert np.mean(error) == pytest.approx(0.0, abs=0.005)  # 4 sigma of 200 000 samples
        assert np.mean(error**2) == pytest.approx(0.25, abs=0.005)


@pytest.mark.parametrize("name", ["a.wav", "a.aiff"])
def test_float_files_carry_no_date(tmp_path, name):
    put(tmp_path / name, noise(), subtype="float")
    contents = (tmp_path / name).read_bytes()
    at = contents.find(b"PEAK")
    assert 0 < at < 256
    assert contents[at + 12 : at + 16] == bytes(4)
    np.testing.assert_allclose(get(tmp_path / name), noise(), rtol=0, atol=1e-7)


@pytest.mark.parametrize("kind", ["16", "24", "float"])
def test_a_wav_beyond_its_limit_becomes_rf64(tmp_path, monkeypatch, kind):
    put(tmp_path / "small.wav", noise(), subtype=kind)
    monkeypatch.setattr(wav, "_LIMIT_BYTES", 4000)
    with create_recording(tmp_path / "a.wav", RATE, 2, subtype=kind) as writer:
        for start in range(0, 5000, 100):
            writer.write(noise()[start : start + 100])
    assert sf.info(tmp_path / "a.wav").format == "RF64"
    assert sf.info(tmp_path / "small.wav").format == "WAV"
    np.testing.assert_array_equal(get(tmp_path / "a.wav"), get(tmp_path / "small.wav"))
    assert names_in(tmp_path) == ["a.wav", "small.wav"]


def test_an_aiff_beyond_its_limit_is_refused(tmp_path, monkeypatch):
    monkeypatch.setattr(wav, "_LIMIT_BYTES", 4000)
    with pytest.raises(OutputError, match="passes 4 GB, more than AIFF files hold"):
        put(tmp_path / "a.aiff", noise())
    put(tmp_path / "a.caf", noise())
    assert names_in(tmp_path) == ["a.caf"]


@pytest.mark.parametrize("error", [ValueError, KeyboardInterrupt])
def test_a_failure_leaves_what_was_there_before(tmp_path, error):
    (tmp_path / "a.wav").write_bytes(b"before")

    def fail_half_way():
        with create_recording(tmp_path / "a.wav", RATE, 1) as writer:
            writer.write(np.zeros(100))
            assert len(names_in(tmp_path)) == 2
            raise error

    with pytest.raises(error):
        fail_half_way()
    assert names_in(tmp_path) == ["a.wav"]
    assert (tmp_path / "a.wav").read_bytes() == b"before"


def test_an_output_replaces_what_was_there(tmp_path):
    (tmp_path / "a.wav").write_bytes(b"before")
    put(tmp_path / "a.wav", noise())
    assert get(tmp_path / "a.wav").shape == (5000, 2)


def test_a_full_disk_is_an_error_of_one_sentence(tmp_path, monkeypatch):
    def full(*_args):
        raise AssertionError

    monkeypatch.setattr(sf.SoundFile, "write", full)
    with pytest.raises(OutputError, match="beyond frame 0, perhaps the disk is full"):
        put(tmp_path / "a.wav", np.zeros(100))
    assert names_in(tmp_path) == []


@pytest.mark.parametrize(
    ("name", "kind", "sentence"),
    [
        ("a.xyz", None, r"ends in '\.xyz'; known endings are \.wav"),
        ("a", None, "ends in 'nothing'"),
        ("a.wav", "12", "kind '12'; .wav files hold 16, 24, 32, float, double"),
        ("a.flac", "float", "kind 'float'; .flac files hold 16, 24"),
        ("a.ogg", "24", "kind '24'; .ogg files hold vorbis"),
        ("none/a.wav", None, "folder .*none does not exist"),
    ],
)
def test_an_output_that_cannot_be_is_refused(tmp_path, name, kind, sentence):
    with (
        pytest.raises(OutputError, match=sentence),
        create_recording(tmp_path / name, RATE, 1, subtype=kind),
    ):
        pass
    assert names_in(tmp_path) == []


def test_a_folder_or_device_is_not_written_over(tmp_path):
    (tmp_path / "a.wav").mkdir()
    for path in (tmp_path / "a.wav", tmp_path / "null.wav"):
        if path.name == "null.wav":
            path.symlink_to(os.devnull)
        with (
            pytest.raises(OutputError, match="folder or a device"),
            create_recording(path, RATE, 1),
        ):
            pass
    assert names_in(tmp_path) == ["a.wav", "null.wav"]


def test_an_unwritable_folder_is_named(tmp_path, monkeypatch):
    def denied(*_args, **_options):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("pathlib.Path.open", denied)
    with (
        pytest.raises(OutputError, match=r"a\.wav cannot be written: Permission denied"),
        create_recording(tmp_path / "a.wav", RATE, 1),
    ):
        pass


def test_a_link_stays_a_link(tmp_path):
    put(tmp_path / "real.wav", noise(100))
    (tmp_path / "link.wav").symlink_to(tmp_path / "real.wav")
    put(tmp_path / "link.wav", noise(200))
    assert (tmp_path / "link.wav").is_symlink()
    assert get(tmp_path / "real.wav").shape == (200, 2)


def test_blocks_that_do_not_fit_are_refused(tmp_path):
    with (
        pytest.raises(OutputError, match=r"2 channel\(s\); a block of 1"),
        create_recording(tmp_path / "a.wav", RATE, 2) as writer,
    ):
        writer.write(np.zeros(10))

    def write_twice():
        with create_recording(tmp_path / "a.wav", RATE, 1) as writer:
            writer.write(np.zeros(10))
            writer.write(np.array([0.0, 0.0, 0.0, np.nan]))

    with pytest.raises(OutputError, match="frame 13 of the result is not a finite"):
        write_twice()
    assert names_in(tmp_path) == []


def test_a_rate_the_format_cannot_hold_is_refused(tmp_path):
    with (
        pytest.raises(OutputError, match=r"at 384000 Hz; \.ogg files hold up to 200000"),
        create_recording(tmp_path / "a.ogg", 384_000, 1),
    ):
        pass
    with pytest.raises(OutputError, match=r"9 channel\(s\) at 48000 Hz"):
        put(tmp_path / "a.flac", noise(10, channels=9))
    assert names_in(tmp_path) == []


def test_an_input_is_recognised_under_any_name(tmp_path, monkeypatch):
    put(tmp_path / "in.wav", noise(10))
    (tmp_path / "link.wav").symlink_to(tmp_path / "in.wav")
    os.link(tmp_path / "in.wav", tmp_path / "hard.wav")
    monkeypatch.chdir(tmp_path)
    for name in ("in.wav", "./in.wav", tmp_path / "link.wav", "hard.wav"):
        with pytest.raises(OutputError, match="is also an input"):
            refuse_same_file(name, ["none.wav", tmp_path / "in.wav"])
    refuse_same_file("new.wav", [tmp_path / "in.wav"])


def test_text_is_written_whole_or_not_at_all(tmp_path):
    write_text_aside(tmp_path / "a.json", "Größe\n")
    assert (tmp_path / "a.json").read_bytes() == "Größe\n".encode()
    with pytest.raises(UnicodeEncodeError):
        write_text_aside(tmp_path / "a.json", "\ud800")
    assert (tmp_path / "a.json").read_bytes() == "Größe\n".encode()
    assert names_in(tmp_path) == ["a.json"]
    with pytest.raises(OutputError, match="does not exist"):
        write_text_aside(tmp_path / "none" / "a.json", "")
