"""Bad input at the command line: one clear sentence, its own exit code, nothing written."""

import os
from pathlib import Path

import numpy as np
import pytest
import soundfile as sf
from click.testing import CliRunner, Result

from tonesim.cli import commands

RATE = 48_000
DESIGN, RECORDING, OUTPUT, USAGE = 11, 12, 13, 2


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    sf.write("take.wav", np.zeros(2000), RATE, "PCM_24")
    Path("sub").mkdir()
    sf.write("sub/take.wav", np.zeros(2000), RATE, "PCM_24")
    Path("text.wav").write_text("no sound in here")
    sf.write("empty.wav", np.zeros(0), RATE)
    sf.write("slow.wav", np.zeros(100), 4000)
    for name, value in (("nan", np.nan), ("inf", np.inf)):
        x = np.zeros(2000)
        x[1500] = value
        sf.write(f"{name}.wav", x, RATE, "FLOAT")
    whole = Path("take.wav").read_bytes()
    Path("short.wav").write_bytes(whole[: len(whole) // 2])
    Path("broken.toml").write_text("title = [")
    Path("parts.toml").write_text('[diodes."D"]\nlike = "1N4184"\n')
    Path("silent.wav").write_bytes(whole)
    return tmp_path


def tree(folder: Path) -> dict[str, tuple[int, bytes]]:
    return {
        str(path): (path.stat().st_mtime_ns, path.read_bytes() if path.is_file() else b"")
        for path in sorted(folder.rglob("*"))
    }


CASES: list[tuple[str, str, int, tuple[str, ...]]] = [
    # name, arguments, exit code, words of the sentence
    ("missing file", "render gone.wav -d no-chain", RECORDING, ("gone.wav does not exist",)),
    ("folder", "render sub -d no-chain", RECORDING, ("sub is a folder",)),
    ("not audio", "render text.wav -d no-chain", RECORDING, ("text.wav is not a recording",)),
    ("zero frames", "render empty.wav -d no-chain", RECORDING, ("empty.wav holds no samples",)),
    ("cut short", "render short.wav -d no-chain", RECORDING, ("short.wav is cut short",)),
    ("rate", "render slow.wav -d no-chain", RECORDING, ("4000 Hz", "8000 to 384000 Hz")),
    ("nan", "render nan.wav -d no-chain", RECORDING, ("holds nan", "frame 1500", "channel 1")),
    ("inf", "render inf.wav -d no-chain", RECORDING, ("holds inf", "frame 1500", "0.0312 s")),
    (
        "nan and loudness",
        "render nan.wav -d no-chain --match -20",
        RECORDING,
        ("holds nan", "frame 1500"),
    ),
    (
        "unknown part",
        "render take.wav -d no-chain --set output.upper=TIP221",
        DESIGN,
        ("output.upper", "'TIP221'", "TIP122"),
    ),
    (
        "wrong unit",
        "render take.wav -d full-chain --set bias.feed_ohm=4k7F",
        DESIGN,
        ("bias.feed_ohm", "in F, expected ohm"),
    ),
    (
        "negative resistor",
        "render take.wav -d full-chain --set bias.feed_ohm=-4k7",
        DESIGN,
        ("bias.feed_ohm is '-4k7', expected more than 0",),
    ),
    ("no design", "render take.wav -d full-chian", DESIGN, ("'full-chian'", "full-chain")),
    ("no TOML", "check broken.toml", DESIGN, ("broken.toml is not valid TOML",)),
    (
        "unknown key",
        "check no-chain --set bias.fed_ohm=1k",
        DESIGN,
        ("bias.fed_ohm is no known key", "bias.feed_ohm"),
    ),
    ("no change", "check no-chain --set bias", DESIGN, ("'bias' is no change", "KEY=VALUE")),
    ("no part file", "check no-chain --parts gone.toml", DESIGN, ("gone.toml does not exist",)),
    ("bad part file", "parts --parts parts.toml", DESIGN, ("diodes.D.like", "1N4148")),
    ("no such part", "parts diodes 1N4184", DESIGN, ("no diode is called '1N4184'", "1N4148")),
    ("no such kind", "parts valves", USAGE, ("'valves' is not one of",)),
    ("no preset", "presets full", USAGE, ("no preset is called 'full'", "full-chain")),
    (
        "output is input",
        "render take.wav -d no-chain -o take.wav",
        OUTPUT,
        ("take.wav is also an input",),
    ),
    (
        "output is another input",
        "render take.wav -d no-chain -o ./sub/../take.wav --force",
        OUTPUT,
        ("is also an input",),
    ),
    (
        "output is the impulse response",
        "render take.wav -d no-chain --cabinet silent.wav -o silent.wav --force",
        OUTPUT,
        ("silent.wav is also an input",),
    ),
    (
        "output exists",
        "render take.wav -d no-chain -o silent.wav",
        OUTPUT,
        ("silent.wav exists", "force"),
    ),
    (
        "silent impulse response",
        "render take.wav -d no-chain --cabinet silent.wav",
        RECORDING,
        ("silent.wav is silent",),
    ),
    (
        "several into one",
        "render take.wav sub/take.wav -d no-chain -o out.wav",
        USAGE,
        ("2 recordings cannot go into one file, out.wav",),
    ),
    (
        "equal names",
        "render take.wav sub/take.wav -d no-chain -o sub",
        USAGE,
        ("take.wav and sub/take.wav would both become sub/take.no-chain.wav",),
    ),
    (
        "unwritable folder",
        "render take.wav -d no-chain -o take.wav/out.wav",
        OUTPUT,
        ("take.wav/out.wav cannot be written",),
    ),
    (
        "missing folder",
        "render take.wav -d no-chain -o none/out.wav",
        OUTPUT,
        ("the folder", "none does not exist"),
    ),
    ("missing folder /", "render take.wav -d no-chain -o none/", OUTPUT, ("none/ does not exist",)),
    ("ending", "render take.wav -d no-chain -o out.mp9", OUTPUT, ("'.mp9'", ".wav, .flac")),
    (
        "subtype",
        "render take.wav -d no-chain -o out.flac --subtype float",
        OUTPUT,
        ("'float'", "16, 24"),
    ),
    (
        "too loud",
        "render take.wav -d no-chain --match 3",
        USAGE,
        ("match is 3 LUFS", "0 or less"),
    ),
    ("match nan", "render take.wav -d no-chain --match nan", USAGE, ("match is nan LUFS",)),
    ("match a word", "render take.wav -d no-chain --match loud", USAGE, ("'loud'",)),
    ("gain's unit", "render take.wav -d no-chain --gain 3V", USAGE, ("--gain", "expected dB")),
    (
        "full scale zero",
        "render take.wav -d no-chain --full-scale 0",
        DESIGN,
        ("input.full_scale_v is 0, expected more than 0",),
    ),
    (
        "two levels",
        "render take.wav -d no-chain --match -20 --output-full-scale 5",
        USAGE,
        ("expected one of them",),
    ),
    ("channel", "render take.wav -d no-chain --channel 2", USAGE, ("no channel 2",)),
    ("multiply", "render take.wav -d no-chain --multiply 3", USAGE, ("power of two",)),
    ("no recording", "render -d no-chain", USAGE, ("RECORDING",)),
    ("no design given", "render take.wav", USAGE, ("'--design'",)),
    ("no such option", "render take.wav -d no-chain --mach 3", USAGE, ("--match",)),
    ("no such command", "rendre take.wav", USAGE, ("rendre",)),
    ("demo into a file", "demo take.wav", OUTPUT, ("take.wav",)),
]


def invoke(line: str) -> Result:
    return CliRunner().invoke(commands, line.split())


@pytest.mark.parametrize(
    ("line", "code", "words"), [case[1:] for case in CASES], ids=[case[0] for case in CASES]
)
def test_bad_input_gets_one_sentence_its_exit_code_and_writes_nothing(folder, line, code, words):
    before = tree(folder)
    result = invoke(line)
    assert result.exit_code == code, result.output
    assert result.stdout == ""
    assert result.stderr.startswith("tonesim: ")
    assert result.stderr.count("\n") == 1, result.stderr
    assert "Traceback" not in result.stderr
    for word in words:
        assert word in result.stderr
    assert tree(folder) == before


def test_repair_takes_what_is_refused_otherwise(folder):
    result = invoke("render nan.wav -d no-chain --repair")
    assert result.exit_code == 0
    assert "not finite and became zero: 1" in result.stdout


@pytest.mark.skipif(not os.path.isdir("/proc/self"), reason="needs a folder nobody can write to")
def test_a_folder_nobody_can_write_to_is_refused(folder):
    before = tree(folder)
    result = invoke("render take.wav -d no-chain -o /proc/out.wav")
    assert result.exit_code == OUTPUT
    assert result.stderr.startswith("tonesim: /proc/out.wav cannot be written")
    assert tree(folder) == before


def test_a_file_that_is_write_protected_is_kept(folder):
    if os.geteuid() == 0:
        pytest.skip("the superuser may write everywhere")
    Path("silent.wav").chmod(0o444)
    result = invoke("render take.wav -d no-chain -o silent.wav --force")
    assert result.exit_code == OUTPUT


def test_two_faults_of_a_design_are_a_line_each(folder):
    result = invoke("check no-chain --set bias.fed_ohm=1k --set load.ohm=-8")
    assert result.exit_code == DESIGN
    lines = result.stderr.splitlines()
    assert len(lines) == 2
    assert all(line.startswith("tonesim: ") for line in lines)
