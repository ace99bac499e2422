"""README, help texts and docstrings say what is there."""

import doctest
import importlib
import re
import shlex
import tomllib
from pathlib import Path

import pytest
from click.testing import CliRunner

from tonesim import cli
from tonesim.designfile import build_design

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text()
COMMANDS = sorted(cli.commands.commands)
WITH_DOCTESTS = (
    *("units", "catalogue", "measured", "design", "circuit", "front", "tolerance"),
    *("signals", "oversample", "level"),
)


def blocks(language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```", README, re.MULTILINE | re.DOTALL)


def test_readme_opens_with_the_job_in_one_paragraph():
    lines = README.splitlines()
    assert lines[0] == "# tonesim"
    assert len(lines[2]) > 300
    assert lines[3] == ""


@pytest.mark.parametrize("text", [b for b in blocks("toml") if "title" in b])
def test_every_design_in_readme_loads(text):
    assert build_design(tomllib.loads(text), "README.md").title


def test_readme_lists_every_key_of_a_design():
    schema = build_design(tomllib.loads(blocks("toml")[0])).model_json_schema()
    table = README[README.index("## Design files") :]
    for name, section in schema["$defs"].items():
        sections = {"Input", "Front", "Tone", "Driver", "Bias", "Output", "Load", "Cabinet"}
        sections |= {"Measured"}
        if name in sections or "Supply" in name:
            for key in section["properties"]:
                assert f"`{key}`" in table or f"{key} =" in table, f"{name}.{key}"


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_has_help_with_an_example_and_stands_in_readme(name):
    shown = CliRunner().invoke(cli.commands, [name, "--help"])
    assert shown.exit_code == 0
    assert f"tonesim {name}" in shown.output
    assert f"### `tonesim {name}" in README


def test_every_command_line_in_readme_parses():
    for block in blocks("sh"):
        for line in block.splitlines():
            line = line.split("#")[0].split(">")[0].strip()
            for part in line.split("&&"):
                words = shlex.split(part)
                if not words or not words[0].endswith("tonesim"):
                    continue
                command = cli.commands.commands[words[1]]
                assert command.make_context(words[1], words[2:]), line


def test_the_test_command_is_where_the_build_script_looks():
    match = re.search(r"<!-- test-command -->\n```sh\n(.*?)\n```", README, re.DOTALL)
    assert match
    assert "pytest" in match[1]
    assert "test-command" in (ROOT / ".ci" / "run").read_text()


@pytest.mark.parametrize("name", WITH_DOCTESTS)
def test_examples_in_docstrings_run(name):
    module = importlib.import_module(f"tonesim.{name}")
    result = doctest.testmod(module)
    assert result.failed == 0
