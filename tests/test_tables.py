"""A sheet as tables and CSV: every figure with its unit, read back by the csv module."""

import csv
import io
import math

import pytest
from bench_pieces import reference_sheet
from hypothesis import given
from hypothesis import strategies as st

from tonesim.sheet import SECTIONS
from tonesim.tables import Quantity, Table, shown, tables, to_csv
from tonesim.units import parse_quantity

UNITLESS = {"", "°", "%"}
WITHOUT = {"gain at 1 kHz", "gain by the resistors"}  # pure numbers
# Words that may stand where a figure would: what was not found, and what needs none.
WORDS = (
    *("any", "none found", "none needed", "none suffices", "runs away", "too hot", "never"),
    *("not in this record", "more than 200 mV", "both together", "upper half", "lower half"),
)


def found() -> list[Table]:
    return tables(reference_sheet()[1])


def rows() -> list[dict[str, str]]:
    return list(csv.DictReader(io.StringIO(to_csv(found()))))


def test_every_section_has_its_tables_in_order():
    names = [table.section for table in found()]
    assert list(dict.fromkeys(names)) == list(SECTIONS)
    for table in found():
        assert table.title
        assert table.rows
        for row in table.rows:
            assert len(row) == len(table.columns)
    titles = [(table.section, table.title) for table in found()]
    assert len(set(titles)) == len(titles)


def test_section_table_row_and_quantity_tell_every_line_from_every_other():
    keys = [(each["section"], each["table"], each["row"], each["quantity"]) for each in rows()]
    assert len(set(keys)) == len(keys)
    # States of the stability table appear with several loads each.
    assert ("stability", "idle, no load") in {(each["section"], each["row"]) for each in rows()}


def test_csv_has_a_line_a_figure_with_its_unit():
    lines = rows()
    figures = sum(
        1
        for table in found()
        for row in table.rows
        for value in row[1:]
        if (value.value if isinstance(value, Quantity) else value) is not None
    )
    assert len(lines) == figures > 500
    assert list(lines[0]) == ["section", "table", "row", "quantity", "value", "unit"]
    for line in lines:
        assert line["section"] in SECTIONS
        try:
            value = float(line["value"])
        except ValueError:
            continue
        assert math.isfinite(value)
        assert line["unit"] or line["row"] in WITHOUT, line


def test_what_is_no_number_in_the_csv_is_a_known_word():
    for line in rows():
        try:
            float(line["value"])
        except ValueError:
            if line["section"] in ("stability", "heat", "power-up"):
                continue  # names of loads, parts and conditions are cells there
            assert line["value"] in WORDS, line


def test_csv_holds_the_sheet_s_own_numbers():
    sheet = reference_sheet()[1]
    assert sheet.gain is not None
    assert sheet.power is not None
    assert sheet.clip is not None
    assert sheet.distortion is not None
    lines = rows()

    def value(section: str, row: str, quantity: str) -> tuple[float, str]:
        (line,) = [
            each
            for each in lines
            if (each["section"], each["row"], each["quantity"]) == (section, row, quantity)
        ]
        return float(line["value"]), line["unit"]

    # Nine digits are written.
    assert value("gain", "gain at 1 kHz", "figure") == (
        pytest.approx(sheet.gain.gain, rel=1e-8),
        "",
    )
    assert value("power", "1 % THD", "efficiency")[0] == pytest.approx(
        100.0 * sheet.power.at_thd[0].efficiency, rel=1e-8
    )
    for half, level in (("upper", sheet.clip.upper.level_v), ("lower", sheet.clip.lower.level_v)):
        assert value("clip", f"{half} half, slow signal", "figure") == (
            pytest.approx(level, rel=1e-8),
            "V",
        )
    assert value("idle", "output device", "upper")[1] == "A"
    assert value("distortion", "6.0 dB", "THD")[0] == pytest.approx(
        sheet.distortion.by_level[-1].harmonics.thd_percent, rel=1e-8
    )


# ---- the reference circuit as its builder would read it (common practice, no source) ----


def test_the_reference_circuit_s_facts_are_on_its_sheet():
    sheet = reference_sheet()[1]
    assert sheet.gain is not None
    assert sheet.clip is not None
    assert sheet.distortion is not None
    # Gain 1 + 100k/4k7, less what the loop's corner of about 150 kHz has cost at 1 kHz.
    assert sheet.gain.gain == pytest.approx(22.28, rel=2e-3)
    # Input for about 22.4 V peak to peak out is half a volt; clipping begins just above it.
    at_full = 11.2 / sheet.gain.gain
    assert at_full == pytest.approx(0.503, abs=0.005)
    assert at_full < sheet.gain.full_input_v < 1.1 * at_full
    # One half goes first, and the sheet says which.
    difference = abs(sheet.clip.upper.level_v) - abs(sheet.clip.lower.level_v)
    assert sheet.clip.first == ("lower half" if difference > 0.0 else "upper half")
    assert 11.14 < min(abs(sheet.clip.upper.level_v), abs(sheet.clip.lower.level_v)) < 12.5
    # Quiescent draw: above the 5 mA of a drop a side, below the 20 mA of a fourth drop.
    assert 5e-3 < sheet.rest.upper.draw_a < 20e-3
    # A trace at 7 kHz, prominent at 40 kHz, on the row 1 dB below clipping.
    loud = {
        round(p.frequency_hz / 1e3): p.harmonics.thd_percent
        for p in sheet.distortion.by_frequency[0]
    }
    assert 0.1 < loud[7] < 0.6
    assert loud[40] > 0.8
    assert loud[1] < loud[10] < loud[20]


# ---- printing ----


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (None, "V", "-"),
        ("any", "K/W", "any"),
        (Quantity(0.0123, "A"), "", "12.3 mA"),
        (Quantity(None, "Hz"), "", "-"),
        (1.234567, "%", "1.23 %"),
        (5e-5, "%", "below 0.0001 %"),
        (0.0, "%", "0 %"),
        (3e-10, "V", "below 1 nV"),
        (-3e-10, "A", "below 1 nA"),
        (0.0, "V", "0 V"),
        (-20.04, "dB", "-20.0 dB"),
        (149.96, "°C", "150.0 °C"),
        (3.14159, "K/W", "3.14 K/W"),
        (22.2766, "", "22.3"),
        (math.inf, "K/W", "none"),
        (-math.inf, "dB", "-"),
        (math.nan, "V", "-"),
        (16e6, "V/s", "16 MV/s"),
    ],
)
def test_values_are_printed_in_their_unit(value, unit, text):
    assert shown(value, unit) == text


@given(st.floats(1e-9, 1e12), st.sampled_from(["V", "A", "W", "Hz", "s"]))
def test_what_is_printed_reads_back_within_three_digits(value, unit):
    # Three digits are half a unit in the third place: 0.5 % at most.
    text = shown(value, unit)
    if unit == "s":  # no unit a design file knows
        text, unit = text[:-1], ""
    assert parse_quantity(text, unit) == pytest.approx(value, rel=5.1e-3)


def test_a_comma_or_a_quote_in_a_title_survives_the_csv():
    table = Table("idle", 'a "title", with a comma', (("", ""), ("x, y", "V")), (("r,1", 1.5),))
    (line,) = csv.DictReader(io.StringIO(to_csv([table])))
    assert line["table"] == table.title
    assert (line["row"], line["quantity"], line["value"], line["unit"]) == (
        "r,1",
        "x, y",
        "1.5",
        "V",
    )
