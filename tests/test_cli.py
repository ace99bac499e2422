"""The command line: what it prints, what it writes, how fast it answers and how it stops."""

import json
import os
import re
import shlex
import signal
import subprocess
import sys
import time
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile as sf
from click.testing import CliRunner, Result

import tonesim
from tonesim.cli import commands
from tonesim.command import INTERRUPTED
from tonesim.designfile import build_design, list_presets, load_design

RATE = 48_000
ROOT = Path(tonesim.__file__).parent.parent  # of the package under test, installed or not
ALL = ("render", "check", "parts", "presets", "demo", "spread", "bench", "audible", "settle")


def invoke(*args: object) -> Result:
    return CliRunner().invoke(commands, [str(arg) for arg in args])


def run(*args: object) -> Result:
    result = invoke(*args)
    assert result.exit_code == 0, result.output
    return result


def start(*args: object, cwd: Path, **more: Any) -> "subprocess.Popen[str]":
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    return subprocess.Popen(
        [sys.executable, "-m", "tonesim", *map(str, args)],
        cwd=cwd,
        env=environment,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        **more,
    )


def finish(process: "subprocess.Popen[str]") -> tuple[int, str, str]:
    out, err = process.communicate(timeout=120)
    return process.returncode, out, err


@pytest.fixture
def take(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A short pluck in an otherwise empty current folder (invented)."""
    monkeypatch.chdir(tmp_path)
    t = np.arange(6000) / RATE
    sf.write("take.wav", 0.3 * np.exp(-8.0 * t) * np.sin(2 * np.pi * 196.0 * t), RATE, "PCM_24")
    return Path("take.wav")


def test_the_version_is_the_package_s(take):
    project = tomllib.loads(
        (Path(__file__).parent.parent / "pyproject.toml").read_text(encoding="utf-8")
    )["project"]
    assert project["version"] == tonesim.__version__
    assert run("--version").stdout == f"tonesim {tonesim.__version__}\n"


def test_help_imports_nothing_heavy(tmp_path):
    heavy = "numpy", "numba", "scipy", "pydantic", "rich", "soundfile", "pyloudnorm", "matplotlib"
    code = (
        "import sys, tonesim.__main__\n"
        f"args = [[], *([name] for name in {ALL})]\n"
        "for each in args:\n"
        "    try: tonesim.cli.commands([*each, '--help'])\n"
        "    except SystemExit as end: assert end.code == 0, end.code\n"
        f"print([name for name in {heavy} if name in sys.modules])"
    )
    done = subprocess.run(
        [sys.executable, "-c", code],
        capture_output=True,
        text=True,
        check=True,
        cwd=tmp_path,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
    )
    assert done.stdout.splitlines()[-1] == "[]"


def examples() -> list[str]:
    found = []
    for name in ((), *((each,) for each in ALL)):
        text = run(*name, "--help").stdout
        block = re.split(r"(?:Examples?|Begin here):\n", text)
        assert len(block) == 2, name
        found += [line.strip() for line in block[1].splitlines() if line.strip()]
    return found


def test_every_command_has_an_example():
    shown = [shlex.split(line)[1] for line in examples()]
    assert set(shown) == set(ALL)


@pytest.mark.slow
@pytest.mark.parametrize("line", [line for line in examples() if line != "tonesim demo"])
def test_an_example_of_the_help_runs(take, line):
    command, _, redirected = line.partition(" > ")
    Path("mine.csv").write_text("figure,value\ngain,21.4\n", encoding="utf-8")  # invented
    result = run(*shlex.split(command)[1:])
    assert result.stdout
    if redirected:
        Path(redirected).write_text(result.stdout, encoding="utf-8")
        load_design(redirected)


def test_a_render_goes_beside_the_user_and_tells_its_figures(take):
    result = run("render", take, "-d", "no-chain")
    assert {path.name for path in Path().iterdir()} == {
        "take.wav",
        "take.no-chain.wav",
        "take.no-chain.json",
    }
    for figure in ("4.4 V at the jack", "real time", "lowest rails", "LUFS", "take.no-chain.wav"):
        assert figure in result.stdout
    assert "\x1b" not in result.stdout
    info = sf.info("take.no-chain.wav")
    assert (info.frames, info.samplerate, info.subtype) == (6000, RATE, "PCM_24")


def test_json_is_the_sidecar_and_parses(take):
    (found,) = json.loads(run("render", take, "-d", "no-chain", "--json").stdout)["renders"]
    assert found == json.loads(Path("take.no-chain.json").read_text(encoding="utf-8"))


def test_options_about_drive_and_cabinet_become_part_of_the_design(take):
    result = run(
        *("render", take, "-d", "full-chain", "--set", "input.gain_db=2", "--json"),
        *("--gain", "-6dB", "--full-scale", "2.2 V", "--cabinet", "CLOSED-back-12"),
    )
    (found,) = json.loads(result.stdout)["renders"]
    design = build_design(found["design"])
    assert design.input.gain_db == -4.0
    assert design.input.full_scale_v == found["input_full_scale_v"] == 2.2
    assert design.cabinet is not None
    assert design.cabinet.part is not None
    assert design.cabinet.part.name == "closed-back-12"


def test_the_cabinet_can_be_left_out_or_be_a_file(take):
    def rendered(cabinet: str) -> dict[str, Any]:
        result = run("render", take, "-d", "full-chain", "--cabinet", cabinet, "--json")
        (found,) = json.loads(result.stdout)["renders"]
        return dict(found)

    assert rendered("none")["design"]["cabinet"] is None
    sf.write("room.wav", np.array([0.5, 0.25]), RATE, "FLOAT")
    used = rendered("room.wav")["design"]["cabinet"]
    assert used["file"] == str(Path("room.wav").resolve())
    wrong = invoke("render", take, "-d", "full-chain", "--cabinet", "open-back-21")
    assert wrong.exit_code == 11
    assert "open-back-12" in wrong.stderr


def test_more_gain_drives_the_stage_harder(take):
    def peak(*more: str) -> float:
        result = run("render", take, "-d", "full-chain", "--json", *more)
        (found,) = json.loads(result.stdout)["renders"]
        return float(found["per_channel"][0]["peak_v"])

    # -20 dB of drive is a tenth of the voltage while the stage does not clip.
    assert peak("--gain", "-30") == pytest.approx(0.1 * peak("--gain", "-10"), rel=0.01)


def test_channels_are_counted_from_one(take):
    sf.write("two.wav", np.column_stack([np.zeros(3000), np.full(3000, 0.1)]), RATE)
    for channel, silent in ((1, True), (2, False)):
        result = run("render", "two.wav", "-d", "full-chain", "--channel", channel, "--json")
        (found,) = json.loads(result.stdout)["renders"]
        assert (found["per_channel"][0]["peak_v"] < 0.01) == silent
    assert invoke("render", "two.wav", "-d", "full-chain", "--channel", "0").exit_code == 2
    assert invoke("render", "two.wav", "-d", "full-chain", "--channel", "3").exit_code == 2


def test_several_recordings_go_into_one_folder(take):
    Path("second.wav").write_bytes(take.read_bytes())
    Path("out").mkdir()
    result = run("render", take, "second.wav", "-d", "no-chain", "-o", "out", "--json")
    assert len(json.loads(result.stdout)["renders"]) == 2
    assert sorted(path.name for path in Path("out").iterdir()) == [
        "second.no-chain.json",
        "second.no-chain.wav",
        "take.no-chain.json",
        "take.no-chain.wav",
    ]


def test_what_is_finished_is_kept_and_told_when_a_later_recording_fails(take):
    bad = np.zeros(3000)
    bad[17] = np.inf
    sf.write("bad.wav", bad, RATE, "DOUBLE")
    result = invoke("render", take, "bad.wav", "-d", "no-chain")
    assert result.exit_code == 12
    assert "take.no-chain.wav" in result.stdout
    assert "frame 17" in result.stderr
    assert Path("take.no-chain.wav").is_file()
    assert not Path("bad.no-chain.wav").exists()


def test_a_file_of_other_origin_is_replaced_by_force_only(take):
    Path("mine.wav").write_bytes(take.read_bytes())
    before = Path("mine.wav").read_bytes()
    refused = invoke("render", take, "-d", "no-chain", "-o", "mine.wav")
    assert refused.exit_code == 13
    assert Path("mine.wav").read_bytes() == before
    run("render", take, "-d", "no-chain", "-o", "mine.wav", "--force")
    assert Path("mine.wav").read_bytes() != before
    run("render", take, "-d", "full-chain", "-o", "mine.wav")  # now it is ours


def test_a_shipped_recording_is_known_by_its_name(take):
    assert invoke("render", "low_riff_", "-d", "no-chain").exit_code == 12
    sf.write("low_riff", np.zeros(500), RATE, format="WAV")  # a file of that name comes first
    result = run("render", "low_riff", "-d", "no-chain", "--json")
    (found,) = json.loads(result.stdout)["renders"]
    assert found["recording"]["frames"] == 500


def test_check_prints_what_it_computes(take):
    result = run("check", "lopsided-rails")
    for word in ("idle current", "clips at", "because of", "closed-loop gain", "output offset"):
        assert word in result.stdout
    data = json.loads(run("check", "lopsided-rails", "--json").stdout)
    assert data["converged"]
    assert data["upper"]["clip"]["level_v"] > -data["lower"]["clip"]["level_v"] > 0.0
    assert f"{data['upper']['clip']['level_v']:+.2f} V" in result.stdout


def test_set_and_parts_reach_every_command_that_takes_a_design(take):
    Path("mine.toml").write_text('[diodes."DROP"]\nlike = "1N4148"\nn = 2.2\n', encoding="utf-8")
    own = ("--parts", "mine.toml", "--set", "bias.upper=DROP", "--set", "bias.lower=DROP")
    plain = json.loads(run("check", "partial-chain", "--json").stdout)
    changed = json.loads(run("check", "partial-chain", "--json", *own).stdout)
    assert changed["upper"]["chain_v"] > plain["upper"]["chain_v"] + 0.05
    (found,) = json.loads(run("render", take, "-d", "partial-chain", "--json", *own).stdout)[
        "renders"
    ]
    assert found["design"]["bias"]["upper"][0]["name"] == "DROP"
    assert "DROP" in run("parts", "diodes", "--parts", "mine.toml").stdout


def test_cautions_are_printed(take):
    assert "caution: " in run("check", "hot-chain").stdout


def test_parts_are_listed_with_their_source(take):
    everything = run("parts").stdout
    for name in ("TIP122", "1N4148", "TL072", "12-inch-8-ohm", "open-back-12"):
        assert name in everything
    assert "TL072" not in run("parts", "diodes").stdout
    one = json.loads(run("parts", "transistors", "tip122", "--json").stdout)
    assert one["name"] == "TIP122"
    shown = run("parts", "transistors", "tip122").stdout
    assert one["source"] in shown
    listed = json.loads(run("parts", "--json").stdout)
    assert listed["transistors"]["TIP122"] == one
    assert set(listed) == {"transistors", "diodes", "opamps", "loudspeakers", "cabinets"}


def test_presets_are_listed_and_printed_as_they_are(take):
    listed = json.loads(run("presets", "--json").stdout)
    assert list(listed) == list_presets()
    text = run("presets", "no-chain").stdout
    Path("mine.toml").write_text(text, encoding="utf-8")
    assert load_design("mine.toml") == load_design("no-chain")
    assert listed["no-chain"]["title"] in run("presets").stdout
    wrong = invoke("presets", "no-chian")
    assert wrong.exit_code == 2
    assert "no-chain" in wrong.stderr


def test_names_are_printed_literally(take):
    name = "take [red]x[bold].wav"
    take.rename(name)
    result = run("render", name, "-d", "no-chain")
    assert "[red]x[bold]" in result.stdout
    missing = invoke("render", "[bold]\x1b[31m.wav", "-d", "no-chain")
    assert "[bold]" in missing.stderr
    assert "\x1b" not in missing.stderr


def test_a_fault_of_our_own_is_one_sentence_and_a_traceback_on_demand(take, monkeypatch):
    def broken(*args: object) -> None:
        raise RuntimeError("no such luck")

    monkeypatch.setattr("tonesim.check.check_design", broken)
    result = invoke("check", "no-chain")
    assert result.exit_code == 1
    assert result.stderr.count("\n") == 1
    assert "no such luck" in result.stderr
    assert "--debug" in result.stderr
    for args in (("check", "no-chain", "--debug"), ("--debug", "check", "no-chain")):
        assert "Traceback" in invoke(*args).stderr


def test_progress_says_nothing_in_a_pipe(take):
    code, _, err = finish(start("render", "take.wav", "-d", "no-chain", cwd=Path.cwd()))
    assert code == 0
    assert err == ""


@pytest.mark.slow
def test_a_cold_start_says_what_it_is_doing(take):
    environment = {
        **os.environ,
        "PYTHONPATH": str(ROOT),
        "NUMBA_CACHE_DIR": str(Path("cache").resolve()),
    }
    for expected in ("tonesim: compiling the circuit solver, once, about 12 s\n", ""):
        done = subprocess.run(
            [sys.executable, "-m", "tonesim", "render", "take.wav", "-d", "no-chain"],
            env=environment,
            capture_output=True,
            text=True,
            check=True,
        )
        assert done.stderr == expected


def test_a_reader_that_goes_away_is_no_error(take):
    with start("parts", cwd=Path.cwd()) as process:
        assert process.stdout is not None
        assert process.stderr is not None
        process.stdout.close()
        assert process.stderr.read() == ""


@pytest.mark.skipif(os.name != "posix", reason="signals of POSIX")
@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
@pytest.mark.parametrize("match", [(), ("--match", "-20")])
def test_an_interrupt_leaves_nothing_behind(take, number, match):
    long = np.random.default_rng(1).uniform(-0.3, 0.3, 300 * RATE)
    sf.write("long.wav", long, RATE, "PCM_16")
    before = set(Path().iterdir())
    process = start("render", "long.wav", "-d", "no-chain", *match, cwd=Path.cwd())
    deadline = time.monotonic() + 60.0
    while set(Path().iterdir()) == before and time.monotonic() < deadline:
        time.sleep(0.05)  # until the unfinished result is there under its temporary name
    assert set(Path().iterdir()) != before
    time.sleep(1.0)
    process.send_signal(number)
    code, out, err = finish(process)
    assert code == INTERRUPTED
    assert out == ""
    assert err.strip() == "tonesim: interrupted, unfinished files are removed"
    assert set(Path().iterdir()) == before
