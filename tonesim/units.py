"""Constants, decibels, thermal voltage, preferred values, and quantities as people write them.

The elementary charge and the Boltzmann constant are exact by definition (SI, 2019 revision).
Reading follows IEC 60062 (letter in place of the decimal point); preferred values follow
IEC 60063. Everything here raises ValueError with a plain sentence; whoever knows the file and
the key turns it into an error for the user.
"""

import math
import re
from collections.abc import Sequence

BOLTZMANN = 1.380649e-23  # J/K, exact (SI 2019)
ELEMENTARY_CHARGE = 1.602176634e-19  # C, exact (SI 2019)
ZERO_CELSIUS = 273.15  # K, exact
T0 = 298.15  # K, reference temperature of all part parameters (25 °C)
DBU_REFERENCE_V = math.sqrt(0.6)  # V rms, 1 mW into 600 Ω

E6 = (1.0, 1.5, 2.2, 3.3, 4.7, 6.8)
E12 = (1.0, 1.2, 1.5, 1.8, 2.2, 2.7, 3.3, 3.9, 4.7, 5.6, 6.8, 8.2)
# Eight values of E24 are not the rounded powers of ten: they keep E12 inside E24 (IEC 60063).
E24 = (
    *(1.0, 1.1, 1.2, 1.3, 1.5, 1.6, 1.8, 2.0, 2.2, 2.4, 2.7, 3.0),
    *(3.3, 3.6, 3.9, 4.3, 4.7, 5.1, 5.6, 6.2, 6.8, 7.5, 8.2, 9.1),
)
E96 = tuple(round(10.0 ** (i / 96), 2) for i in range(96))

_EXPONENTS = {"p": -12, "n": -9, "u": -6, "m": -3, "": 0, "k": 3, "M": 6, "G": 9, "T": 12}
_UNITS = {
    "ohm": "ohm",
    "ohms": "ohm",
    "ω": "ohm",  # Greek letter and ohm sign alike, in lower case
    "f": "F",
    "h": "H",
    "v": "V",
    "a": "A",
    "w": "W",
    "hz": "Hz",
    "db": "dB",
    "°c": "°C",
}
_LONGEST = 40
_INSERTED = re.compile(r"([+-]?)([0-9]*)([RKkMGTFmunp])([0-9]+)(.*)")
_SUFFIXED = re.compile(r"([+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?) *(.*)")
_PLAIN_UNITS = ("dB", "°C", "%", "")


def kelvin(temperature_c: float) -> float:
    """Absolute temperature in kelvin from degrees Celsius."""
    return temperature_c + ZERO_CELSIUS


def thermal_voltage(temperature_c: float) -> float:
    """Thermal voltage kT/q in volts at a temperature in degrees Celsius."""
    return BOLTZMANN * kelvin(temperature_c) / ELEMENTARY_CHARGE


def db_to_ratio(decibels: float) -> float:
    """Amplitude ratio of a level difference in decibels, 10^(dB/20)."""
    return float(10.0 ** (decibels / 20.0))


def ratio_to_db(ratio: float) -> float:
    """Level difference in decibels of an amplitude ratio; minus infinity for zero.

    Raises
    ------
    ValueError
        If the ratio is negative.
    """
    if ratio < 0.0:
        raise ValueError(f"a ratio of {ratio:g} has no level, expected zero or more")
    return 20.0 * math.log10(ratio) if ratio > 0.0 else -math.inf


def dbu_to_peak_volts(dbu: float) -> float:
    """Peak volts of a sine whose level is given in dBu (0 dBu = sqrt(0.6) V rms)."""
    return DBU_REFERENCE_V * math.sqrt(2.0) * db_to_ratio(dbu)


def parse_quantity(text: str | int | float, unit: str = "") -> float:
    """Read a quantity as builders write it.

    Accepted are numbers, plain texts ("1e-9", "-15"), IEC 60062 texts with a letter in place of
    the decimal point ("4k7", "0R22", "p33"), the same letter at the end ("470R", "100n"), and
    any of them followed by the unit ("100 nF", "4k7ohm"). ``k`` and ``K`` are kilo, ``M`` is
    mega, ``m`` is milli; ``u`` and ``µ`` are micro. Tolerance letters are not read.

    Parameters
    ----------
    text : str, int or float
    unit : str
        The unit expected: "ohm", "F", "H", "V", "A", "W", "Hz", "dB", "°C", or empty for any.

    Returns
    -------
    float
        In SI units.

    Raises
    ------
    ValueError
        If the text is not a quantity, is not finite, or carries another unit.

    Examples
    --------
    >>> parse_quantity("4k7", "ohm")
    4700.0
    >>> parse_quantity("R47")
    0.47
    """
    if isinstance(text, bool) or not isinstance(text, str | int | float):
        raise ValueError(f"{text!r} is not a quantity")
    if not isinstance(text, str):
        return _finite(text, repr(text))
    shown = repr(text if len(text) <= _LONGEST else text[:_LONGEST] + "...")
    plain = text.strip().replace("µ", "u").replace("μ", "u")
    if len(plain) > _LONGEST:
        raise ValueError(f"{shown} is too long for a quantity")
    if "," in plain:
        raise ValueError(f"{shown} is not a quantity, write the decimal comma as a point")
    inserted = _INSERTED.fullmatch(plain)
    if inserted:
        sign, whole, letter, fraction, rest = inserted.groups()
        prefix, implied = _letter(letter)
        number = f"{sign}{whole or '0'}.{fraction}e{_EXPONENTS[prefix]}"
    else:
        suffixed = _SUFFIXED.fullmatch(plain)
        if suffixed is None:
            raise ValueError(f"{shown} is not a quantity")
        number, rest = suffixed.groups()
        prefix, implied, rest = _split_suffix(rest)
        mantissa, _, exponent = number.lower().partition("e")
        number = f"{mantissa}e{int(exponent or 0) + _EXPONENTS[prefix]}"
    found = _unit_of(rest.strip(), implied, shown)
    if unit and found and found != unit:
        raise ValueError(f"{shown} is in {found}, expected {unit}")
    return _finite(float(number), shown)


def _finite(value: int | float, shown: str) -> float:
    try:
        number = float(value)
    except OverflowError:
        number = math.inf
    if not math.isfinite(number):
        raise ValueError(f"{shown[:_LONGEST]} is not a finite number")
    return number


def _letter(letter: str) -> tuple[str, str]:
    """Split an IEC 60062 letter into its prefix and the unit it implies."""
    if letter == "R":
        return "", "ohm"
    if letter == "F":
        return "", "F"
    return ("k" if letter == "K" else letter), ""


def _split_suffix(rest: str) -> tuple[str, str, str]:
    """Split what follows a number into prefix, implied unit and unit text."""
    if rest == "" or rest.lower() in _UNITS:
        return "", "", rest
    if rest[0] in "RKkMGTmunp" and (len(rest) == 1 or rest[1:].strip().lower() in _UNITS):
        prefix, implied = _letter(rest[0])
        return prefix, implied, rest[1:]
    return "", "", rest


def _unit_of(rest: str, implied: str, shown: str) -> str:
    if not rest:
        return implied
    found = _UNITS.get(rest.lower())
    if found is None or (implied and implied != found):
        raise ValueError(f"{shown} is not a quantity, {rest!r} is no unit known here")
    return found


def format_quantity(value: float, unit: str, digits: int = 3) -> str:
    """Write a quantity in engineering notation, with as many significant digits.

    Parameters
    ----------
    value : float
        In SI units.
    unit : str
        "ohm" is printed as Ω; decibels, degrees and per cent take no prefix.
    digits : int

    Examples
    --------
    >>> format_quantity(4700.0, "ohm")
    '4.7 kΩ'
    >>> format_quantity(-0.0234, "A")
    '-23.4 mA'
    """
    symbol = "Ω" if unit == "ohm" else unit
    if value == 0.0 or not math.isfinite(value) or unit in _PLAIN_UNITS:
        return f"{value + 0.0:.{digits}g} {symbol}".rstrip()
    # Rounding first: 999.7 with three digits is 1 k, not 1000.
    _, _, exponent = f"{value:.{digits - 1}e}".partition("e")
    step = min(max(3 * (int(exponent) // 3), -12), 12)
    prefix = next(name for name, power in _EXPONENTS.items() if power == step)
    scaled = float(f"{value / 10.0**step:.{digits}g}")
    text = f"{scaled:.10f}".rstrip("0").rstrip(".")
    return f"{text} {'µ' if prefix == 'u' else prefix}{symbol}"


def preferred_between(low: float, high: float, series: Sequence[float]) -> tuple[float, ...]:
    """Values of a preferred series from `low` to `high`, both included, rising.

    Examples
    --------
    >>> preferred_between(900.0, 1300.0, E24)
    (910.0, 1000.0, 1100.0, 1200.0, 1300.0)
    """
    if not (math.isfinite(low) and math.isfinite(high) and 0.0 < low <= high):
        return ()
    first, last = math.floor(math.log10(low)), math.floor(math.log10(high))
    edge = 1.0 + 1e-9
    return tuple(
        float(f"{step}e{decade}")
        for decade in range(first, last + 1)
        for step in series
        if low / edge <= float(f"{step}e{decade}") <= high * edge
    )


def nearest_preferred(value: float, series: Sequence[float]) -> float:
    """Preferred value nearest by ratio, from a series such as `E12` (IEC 60063).

    Raises
    ------
    ValueError
        If the value is not a finite number above zero.

    Examples
    --------
    >>> nearest_preferred(5000.0, E12)
    4700.0
    """
    if not (math.isfinite(value) and value > 0.0):
        raise ValueError(f"{value!r} has no preferred value, expected a number above zero")
    decade = math.floor(math.log10(value))
    # Through text, so that 4.7 nano is the very float a reader gets from "4.7e-9".
    candidates = [float(f"{m}e{d}") for d in (decade - 1, decade, decade + 1) for m in series]
    return min(candidates, key=lambda candidate: abs(math.log(candidate / value)))
