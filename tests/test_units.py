"""Units: IEC 60062 texts, IEC 60063 series, decibels and the thermal voltage."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from tonesim import units


# IEC 60062, the resistor examples of the standard's table.
@pytest.mark.parametrize(
    ("text", "ohms"),
    [
        ("R47", 0.47),
        ("4R7", 4.7),
        ("470R", 470.0),
        ("4K7", 4700.0),
        ("47K", 47e3),
        ("47K3", 47.3e3),
        ("470K", 470e3),
        ("4M7", 4.7e6),
    ],
)
def test_resistor_codes_of_iec_60062_are_read(text: str, ohms: float) -> None:
    assert units.parse_quantity(text, "ohm") == ohms


# IEC 60062, capacitor codes (from memory).
@pytest.mark.parametrize(
    ("text", "farads"), [("p33", 0.33e-12), ("4p7", 4.7e-12), ("4n7", 4.7e-9), ("4µ7", 4.7e-6)]
)
def test_capacitor_codes_of_iec_60062_are_read(text: str, farads: float) -> None:
    assert units.parse_quantity(text, "F") == farads


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("0R22", 0.22),
        ("4k7", 4700.0),
        ("2200u", 2200e-6),
        ("4u7", 4.7e-6),
        ("4μ7", 4.7e-6),
        ("100n", 100e-9),
        ("1e-9", 1e-9),
        ("1m", 1e-3),
        ("1M", 1e6),
        ("4.7 k", 4700.0),
        ("4k7ohm", 4700.0),
        ("470 kΩ", 470e3),
        ("470 k\u2126", 470e3),
        ("100nF", 100e-9),
        ("-15 V", -15.0),
        ("1 kHz", 1000.0),
        (" 12 ", 12.0),
        (47, 47.0),
        (0.5, 0.5),
    ],
)
def test_quantities_are_read_as_builders_write_them(text: str | float, value: float) -> None:
    assert units.parse_quantity(text) == value


@pytest.mark.parametrize(
    ("text", "unit", "words"),
    [
        ("10nF", "ohm", ["'10nF'", "in F", "expected ohm"]),
        ("0R22", "F", ["in ohm", "expected F"]),
        ("4k7 V", "ohm", ["in V", "expected ohm"]),
        ("4,7k", "ohm", ["decimal comma"]),
        ("forty", "ohm", ["'forty'", "not a quantity"]),
        ("", "ohm", ["''", "not a quantity"]),
        ("4k7J", "ohm", ["'J'"]),
        ("4k7k7", "ohm", ["not a quantity"]),
        ("nan", "", ["not a quantity"]),
        ("1e999", "", ["not a finite number"]),
        (math.inf, "", ["not a finite number"]),
        (10**400, "", ["not a finite number"]),
        ("9" * 5000, "", ["too long"]),
        (True, "", ["True", "not a quantity"]),
        ("４k７", "", ["not a quantity"]),
    ],
)
def test_what_is_no_quantity_is_refused_in_plain_words(
    text: str | float, unit: str, words: list[str]
) -> None:
    with pytest.raises(ValueError, match=r".") as refusal:
        units.parse_quantity(text, unit)
    assert all(word in str(refusal.value) for word in words), str(refusal.value)


@given(st.floats(1e-12, 1e12))
def test_what_is_printed_reads_back_to_the_printed_digits(value: float) -> None:
    # Three digits printed: at most half a unit of the third digit is lost, 1 part in 200.
    back = units.parse_quantity(units.format_quantity(value, "ohm"), "ohm")
    assert back == pytest.approx(value, rel=0.005001)


@given(st.text(max_size=50))
def test_any_text_is_either_a_finite_number_or_a_plain_refusal(text: str) -> None:
    try:
        value = units.parse_quantity(text)
    except ValueError as refusal:
        sentence = str(refusal)
        value = 0.0
    else:
        sentence = "a finite quantity"
    assert math.isfinite(value)
    assert "quantity" in sentence or "finite" in sentence


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (4700.0, "ohm", "4.7 kΩ"),
        (0.0234, "A", "23.4 mA"),
        (-0.0234, "A", "-23.4 mA"),
        (999.7, "Hz", "1 kHz"),
        (2200e-6, "F", "2.2 mF"),
        (4.7e-6, "F", "4.7 µF"),
        (0.0, "V", "0 V"),
        (-3.456, "dB", "-3.46 dB"),
        (12345.0, "°C", "1.23e+04 °C"),
        (2e-14, "A", "0.02 pA"),
        (-math.inf, "dB", "-inf dB"),
    ],
)
def test_quantities_print_in_engineering_notation(value: float, unit: str, text: str) -> None:
    assert units.format_quantity(value, unit) == text


# IEC 60063: E6 and E12 are every fourth and second value of E24; E96 is 10^(i/96) to 3 digits.
def test_the_series_of_iec_60063_nest() -> None:
    assert units.E24[::2] == units.E12
    assert units.E12[::2] == units.E6
    assert [len(s) for s in (units.E6, units.E12, units.E24, units.E96)] == [6, 12, 24, 96]


def test_e24_leaves_the_rule_at_the_eight_values_of_iec_60063() -> None:
    off = {
        value: round(10 ** (i / 24), 1)
        for i, value in enumerate(units.E24)
        if round(10 ** (i / 24), 1) != value
    }
    assert off == {
        2.7: 2.6,
        3.0: 2.9,
        3.3: 3.2,
        3.6: 3.5,
        3.9: 3.8,
        4.3: 4.2,
        4.7: 4.6,
        8.2: 8.3,
    }


def test_e96_opens_with_the_values_of_iec_60063() -> None:
    assert units.E96[:8] == (1.00, 1.02, 1.05, 1.07, 1.10, 1.13, 1.15, 1.18)


def test_the_nearest_preferred_value_is_the_nearest_by_ratio() -> None:
    assert units.nearest_preferred(5.0e3, units.E12) == 4.7e3
    assert units.nearest_preferred(5.0e3, units.E24) == 5.1e3
    assert units.nearest_preferred(9.6e-9, units.E12) == 1e-8


@given(st.floats(1e-12, 1e12), st.sampled_from([units.E6, units.E12, units.E24, units.E96]))
def test_no_preferred_value_is_further_than_the_widest_gap(
    value: float, series: tuple[float, ...]
) -> None:
    gaps = [b / a for a, b in zip(series, (*series[1:], 10.0), strict=True)]
    ratio = units.nearest_preferred(value, series) / value
    assert max(ratio, 1 / ratio) <= math.sqrt(max(gaps)) * (1 + 1e-12)


@pytest.mark.parametrize("value", [0.0, -1.0, math.nan, math.inf])
def test_a_value_without_preferred_neighbour_is_refused(value: float) -> None:
    with pytest.raises(ValueError, match="above zero"):
        units.nearest_preferred(value, units.E12)


# SI 2019: k and q are exact, so kT/q at 298.15 K is 25.692579 mV to the digits shown.
def test_the_thermal_voltage_follows_the_exact_constants() -> None:
    assert units.thermal_voltage(25.0) == pytest.approx(0.025692579, abs=1e-9)
    assert units.kelvin(25.0) == units.T0


# 0 dBu is 1 mW in 600 Ω, sqrt(0.6) V rms; +4 dBu is the 1.228 V rms of line level (common
# practice, no source).
@pytest.mark.parametrize(
    ("dbu", "rms"), [(0, math.sqrt(0.6)), (4, 1.228), (20, 7.746), (-20, 0.07746)]
)
def test_levels_in_dbu_become_peak_volts(dbu: float, rms: float) -> None:
    # The table values are rounded to four digits.
    assert units.dbu_to_peak_volts(dbu) == pytest.approx(rms * math.sqrt(2), rel=5e-4)


@given(st.floats(-200, 200))
def test_decibels_and_ratios_are_inverse(decibels: float) -> None:
    assert units.ratio_to_db(units.db_to_ratio(decibels)) == pytest.approx(decibels, abs=1e-9)


def test_silence_is_minus_infinity_and_a_negative_ratio_is_refused() -> None:
    assert units.ratio_to_db(0.0) == -math.inf
    with pytest.raises(ValueError, match="-1"):
        units.ratio_to_db(-1.0)
