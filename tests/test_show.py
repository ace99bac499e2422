"""Text for the terminal: literal, complete in a pipe, and honest about doubts."""

import dataclasses
import io
import math
import sys
from pathlib import Path

import numpy as np
import pytest
import soundfile as sf
from conftest import make_design
from hypothesis import given
from hypothesis import strategies as st

from tonesim import show
from tonesim.catalogue import load_catalogue
from tonesim.check import check_design
from tonesim.demo import DemoReport, Heard, Variant
from tonesim.designfile import load_design
from tonesim.render import render
from tonesim.report import RenderOptions, RenderReport


@pytest.fixture(scope="module")
def report(tmp_path_factory: pytest.TempPathFactory) -> RenderReport:
    folder = tmp_path_factory.mktemp("show")
    sf.write(folder / "in.wav", np.full(2000, 0.01), 48_000, "PCM_24")
    return render(folder / "in.wav", folder / "out.wav", make_design())


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


@given(st.text())
def test_nothing_a_terminal_obeys_is_printed(text):
    shown = show.printable(text)
    assert len(shown) == len(text)
    assert all(c.isprintable() or c == "\n" for c in shown)
    shown.encode("utf-8")


def test_a_table_in_a_pipe_is_plain_and_never_cut(capsys):
    long = "x" * 300
    show.print_table("title [bold]", ("name", "value"), [("[red]a[/red]", long), ("b", "")])
    assert capsys.readouterr().out.splitlines() == [
        "title [bold]",
        "  name          value",
        f"  [red]a[/red]  {long}",
        "  b",
    ]


@pytest.mark.parametrize("columns", [("name", "value"), ("", "")])
def test_a_table_on_a_terminal_is_literal_too(monkeypatch, columns):
    terminal = Terminal()
    monkeypatch.setattr(sys, "stdout", terminal)
    show.print_table("title [bold]", columns, [("[red]a[/red] :smile:", "\x1b[31m1")])
    show.print_line("a [link] line")
    text = terminal.getvalue()
    for literal in ("title [bold]", "[red]a[/red] :smile:", "?[31m1", "a [link] line"):
        assert literal in text
    assert "\x1b[31m" not in text
    assert ("name" in text) == (columns[0] == "name")


def test_progress_is_silent_unless_somebody_watches(monkeypatch, capsys):
    with show.progress_bars(100) as begin:
        begin("a", 100)(0.5)
    assert capsys.readouterr() == ("", "")
    terminal = Terminal()
    monkeypatch.setattr(sys, "stderr", terminal)
    monkeypatch.setenv("TERM", "xterm")
    with show.progress_bars(100) as begin:
        advance = begin("take [red]x", 60)
        advance(0.5)
        advance(1.0)
        begin("next", 40)(1.0)
    assert "take [red]x" in terminal.getvalue() or "next" in terminal.getvalue()


def test_a_clean_result_has_no_notes(report):
    assert show.render_warnings(report) == []


def test_every_doubt_about_a_result_gets_its_note(report):
    made = report.performance
    evidence = dataclasses.replace(made.evidence[0], unsettled_steps=3)
    doubtful = dataclasses.replace(
        report,
        clipped_samples=5,
        match_limited=True,
        loudness_lufs=-21.3,
        options=RenderOptions(match_lufs=-12.0),
        performance=dataclasses.replace(
            made, evidence=(evidence,), repaired_samples=2, loudness_lufs=-math.inf
        ),
    )
    notes = show.render_warnings(doubtful)
    assert len(notes) == 5
    for words in ("full scale: 5", "-21.3 LUFS instead of -12", "zero: 2", "settle: 3", "silent"):
        assert any(words in note for note in notes), words


def test_a_render_is_told_with_its_volts(report, capsys):
    show.show_render(report)
    text = capsys.readouterr().out
    assert f"{report.performance.evidence[0].peak_v:.2f} V" in text
    assert f"{report.output_full_scale_v:.4g} V out" in text
    assert report.design_key_sha256[:12] in text


def test_a_check_is_told_half_by_half(capsys):
    check = check_design(load_design("single-pair-current-limit"))
    show.show_check(check)
    lines = capsys.readouterr().out.splitlines()
    (because,) = [line.split("  ") for line in lines if "because of" in line]
    assert [cell.strip() for cell in because if cell.strip()] == [
        "because of",
        check.upper.clip.cause,
        check.lower.clip.cause,
    ]
    # Each limit has its line; where nothing is gained the figure is a plain zero.
    gained = [line for line in lines if "gained without" in line]
    assert len(gained) == len(check.upper.clip.gains_v)
    assert any(line.endswith("0 V") for line in gained)


def test_every_shipped_part_can_be_shown(capsys):
    catalogue = load_catalogue()
    for kind in ("transistors", "diodes", "opamps", "loudspeakers", "cabinets"):
        parts = list(getattr(catalogue, kind).values())
        show.show_parts(kind, parts)
        listed = capsys.readouterr().out
        for part in parts:
            assert f"  {part.name} " in listed
            show.show_part(part)
            shown = capsys.readouterr().out
            assert f"source: {part.source}" in shown
            assert "None" not in shown


@pytest.mark.parametrize(
    ("quiet_db", "loud_db", "words"),
    [
        (-20.0, -40.0, "Listen to the tail at 6.0 to 10.0 s: 20 dB more"),
        (-40.0, -25.0, "Listen to the attacks: 15 dB more"),
        (-30.0, -31.0, "alike"),
        (None, None, "the reference"),
    ],
)
def test_the_demo_says_where_to_listen(report, capsys, quiet_db, loud_db, words):
    variant = Variant("no-chain", "title", 2e-8, 12.1, (0.3, 1e-6))
    heard = Heard("take.wav", "no-chain", report, loud_db, quiet_db, 6.0, 10.0)
    show.show_demo(DemoReport(-20.0, (variant,), (heard,), 1.0))
    text = capsys.readouterr().out
    assert words in text
    assert "below 0.001 %" in text
    assert "hearing" in text
    assert Path(text.splitlines()[-1]) == report.output
