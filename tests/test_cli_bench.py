"""`tonesim bench`: what it prints and writes, and how it refuses."""

import csv
import json
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from tonesim.cli import commands
from tonesim.command import INTERRUPTED
from tonesim.designfile import presets_folder
from tonesim.errors import DesignError, OutputError, SolverError, UsageError
from tonesim.sheet import SECTIONS


def invoke(*args: object) -> Result:
    return CliRunner().invoke(commands, ["bench", *(str(arg) for arg in args)])


@pytest.fixture(autouse=True)
def empty_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    return tmp_path


def test_sections_are_printed_alone_and_in_order():
    result = invoke("hot-chain", "clip", "idle")
    assert result.exit_code == 0, result.stderr
    headings = [line for line in result.stdout.splitlines() if line.isupper()]
    assert headings == ["IDLE", "CLIP"]
    for word in ("margin to thermal runaway", "goes first", "output device", "Caution"):
        assert word in result.stdout
    assert "mains voltage kills" in result.stdout
    assert "\x1b" not in result.stdout


def test_json_parses_and_csv_reads_back(empty_folder):
    result = invoke("hot-chain", "idle", "clip", "--json", "--csv", "figures.csv")
    assert result.exit_code == 0, result.stderr
    data = json.loads(result.stdout)
    assert {*SECTIONS} & set(data) == {"idle", "clip"}
    assert data["unsettled_steps"] == 0
    with open("figures.csv", newline="", encoding="utf-8") as file:
        lines = list(csv.DictReader(file))
    level = next(line for line in lines if line["row"] == "upper half, slow signal")
    assert float(level["value"]) == pytest.approx(data["clip"]["upper"]["level_v"], rel=1e-8)
    assert level["unit"] == "V"
    assert [path.name for path in empty_folder.iterdir()] == ["figures.csv"]


def test_a_csv_is_written_again_over_itself():
    for section, row in (("idle", "output device"), ("clip", "goes first")):
        assert invoke("hot-chain", section, "--csv", "figures.csv").exit_code == 0
        text = Path("figures.csv").read_text(encoding="utf-8")
        assert row in text
    assert "output device" not in text


def test_air_around_the_sinks_is_what_is_asked_for():
    result = invoke("hot-chain", "heat", "--ambient", "55 °C", "--json")
    assert result.exit_code == 0, result.stderr
    assert json.loads(result.stdout)["heat"]["ambient_c"] == 55.0


LIMIT = "supply.current_limit_a"
# What is refused: arguments, exit code, what the sentence says.
REFUSED = {
    "no section": ("hot-chain ide", UsageError, ("'ide'", "idle", "power-up")),
    "no design": ("hot-chian idle", DesignError, ("'hot-chian'", "hot-chain")),
    "no quantity": ("hot-chain heat --ambient warm", UsageError, ("--ambient", "warm")),
    "no air": ("hot-chain heat --ambient -300", UsageError, ("-300", "-40 to 150")),
    "hard on": (
        f"hot-chain idle --set output.temperature_c=150 --set {LIMIT}=0.5",
        SolverError,
        ("Kiln 12, hot chain", "no idle point", "rails do not come to rest"),
    ),
    "shorted rails": (
        f"hot-chain idle --set {LIMIT}=1m",
        SolverError,
        ("Kiln 12, hot chain", "current limit"),
    ),
    "weak winding": (
        "full-chain square --set supply.winding_ohm=3k --set supply.regulation=0",
        SolverError,
        ("Shed combo, full chain", "no idle point"),
    ),
    "op-amp beyond its supply": (
        "full-chain idle --set driver.part=LM741 --set supply.winding_v=20",
        DesignError,
        ("driver.part is LM741", "36 V in all"),
    ),
    "runaway": (
        "full-chain idle --set bias.upper=LED-red,LED-red --set bias.lower=LED-red,LED-red "
        "--set output.emitter_ohm=0",
        DesignError,
        ("turns the pair hard on",),
    ),
    "no folder": (
        "hot-chain idle --csv gone/figures.csv",
        OutputError,
        ("gone/figures.csv cannot be written", "does not exist"),
    ),
    "a folder": ("hot-chain idle --csv .", OutputError, ("is a folder",)),
}


@pytest.mark.parametrize("name", REFUSED)
def test_what_cannot_be_measured_is_one_sentence_and_nothing_written(name, empty_folder):
    args, error, words = REFUSED[name]
    more = () if "--csv" in args else ("--csv", "figures.csv")
    result = invoke(*args.split(), *more)
    assert result.exit_code == error.exit_code != 0
    said = [line for line in result.stderr.splitlines() if "compiling" not in line]
    assert 1 <= len(said) <= 2  # a design may have a fault in either half
    for line in said:
        assert line.startswith("tonesim: ")
    for word in words:
        assert word in said[0]
    assert "Traceback" not in result.output
    assert "fault in tonesim" not in result.output
    assert result.stdout == ""
    assert list(empty_folder.iterdir()) == []


def test_a_missing_folder_is_found_before_the_measurement(monkeypatch):
    def never(*args: object, **more: object) -> None:
        raise AssertionError("measured")

    monkeypatch.setattr("tonesim.sheet.measure_sheet", never)
    assert invoke("hot-chain", "--csv", "gone/figures.csv").exit_code == OutputError.exit_code


def test_a_design_is_not_replaced_by_its_own_figures():
    text = (presets_folder() / "hot-chain.toml").read_text(encoding="utf-8")
    Path("mine.toml").write_text(text, encoding="utf-8")
    result = invoke("mine.toml", "idle", "--csv", "mine.toml")
    assert result.exit_code == OutputError.exit_code
    assert "mine.toml is also an input" in result.stderr
    assert Path("mine.toml").read_text(encoding="utf-8") == text


def test_an_interrupt_leaves_nothing_behind(monkeypatch, empty_folder):
    def interrupted(*args: object, **more: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr("tonesim.sheet.measure_idle", interrupted)
    result = invoke("hot-chain", "idle", "--csv", "figures.csv")
    assert result.exit_code == INTERRUPTED
    assert "interrupted" in result.stderr
    assert list(empty_folder.iterdir()) == []
