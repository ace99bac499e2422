"""Heat: junction temperatures, heat sinks, thermal runaway and the best class-AB current.

Temperatures are in degrees Celsius, thermal resistances in kelvins per watt, powers in watts for
each device. The circuit of heat is a chain of resistances: junction, case, sink, ambient air.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

from scipy.optimize import brentq

from tonesim.catalogue import Transistor, conduction
from tonesim.errors import UsageError
from tonesim.units import thermal_voltage

VBE_SLOPE_V_PER_K = 0.002  # fall of a base-emitter voltage (common practice, no source)
_LEAST_STEP_K = 0.25  # march towards equilibrium; two equilibria nearer than this are runaway
_SLOPE_STEP_K = 0.05  # half-width of central differences
_SETTLED_K = 1e-6
_COLDEST_C = -273.0  # there is still a thermal voltage to divide by


@dataclass(frozen=True)
class HeatPath:
    """Way of the heat from a junction into the air.

    `sharing` devices, each with the same heat, stand on one sink: it meets the heat of all, the
    rest of the path that of one.
    """

    rth_jc_k_per_w: float
    rth_cs_k_per_w: float
    rth_sa_k_per_w: float
    sharing: int = 1

    def __post_init__(self) -> None:
        for name in ("rth_jc_k_per_w", "rth_cs_k_per_w", "rth_sa_k_per_w"):
            _at_least(getattr(self, name), name)
        if self.sharing < 1:
            raise UsageError(f"sharing is {self.sharing}, expected one device or more on a sink")

    @property
    def total_k_per_w(self) -> float:
        """Rise of the junction over the air for each watt of one device."""
        return self.rth_jc_k_per_w + self.rth_cs_k_per_w + self.sharing * self.rth_sa_k_per_w


@dataclass(frozen=True)
class HeatsinkNeed:
    """Largest sink-to-air resistance that keeps a rating.

    Infinite without heat. Where `possible` is False no sink suffices: even on one without any
    resistance the junction would reach `coolest_junction_c`.
    """

    possible: bool
    rth_sa_k_per_w: float
    coolest_junction_c: float


@dataclass(frozen=True)
class Bias:
    """What decides whether an output device's idle current runs away with its temperature.

    `tracking` is the share of the junction's drift that the bias voltage follows, 0 to 1.
    """

    idle_a: float
    vce_v: float
    emitter_ohm: float
    vbe_slope_v_per_k: float = VBE_SLOPE_V_PER_K
    tracking: float = 0.0
    temperature_c: float = 25.0

    def __post_init__(self) -> None:
        for name in ("idle_a", "vce_v", "emitter_ohm", "vbe_slope_v_per_k"):
            _at_least(getattr(self, name), name)
        if not 0.0 <= self.tracking <= 1.0:
            raise UsageError(f"tracking is {self.tracking:g}, expected 0 to 1")
        _at_least(self.temperature_c, "temperature_c", _COLDEST_C)


@dataclass(frozen=True)
class Equilibrium:
    """Where a stage's temperature comes to rest, with the evidence.

    Without one below the limit `settled` is False, `junction_c` is the limit and `power_w` the
    heat there. `loop_gain` is the rise of the air-to-junction difference for each kelvin at that
    point: below 1 a settled stage returns from a disturbance, and an unsettled one is merely too
    hot; from 1 on it runs away. `residual_k` is the distance from balance.
    """

    settled: bool
    junction_c: float
    power_w: float
    loop_gain: float
    residual_k: float
    converged: bool


def junction_temperature(power_w: float, path: HeatPath, ambient_c: float) -> float:
    """Junction temperature Tj = Ta + P (Rjc + Rcs + Rsa).

    Raises
    ------
    UsageError
        If the power is negative or not finite.
    """
    return ambient_c + _at_least(power_w, "power_w") * path.total_k_per_w


def largest_heatsink(
    power_w: float, path: HeatPath, ambient_c: float, junction_max_c: float
) -> HeatsinkNeed:
    """Largest sink-to-air resistance that keeps a junction at or below a temperature.

    Rsa = ((Tj - Ta) / P - Rjc - Rcs) / sharing.

    Parameters
    ----------
    power_w : float
        Heat of one device.
    path : HeatPath
        Its own sink resistance counts for nothing.
    ambient_c, junction_max_c : float

    Raises
    ------
    UsageError
        If the power is negative or not finite.
    """
    best = replace(path, rth_sa_k_per_w=0.0)
    coolest = junction_temperature(power_w, best, ambient_c)
    spare = junction_max_c - coolest
    if power_w == 0.0:
        return HeatsinkNeed(spare >= 0.0, math.inf if spare >= 0.0 else 0.0, coolest)
    rth = max(spare, 0.0) / (power_w * path.sharing)
    return HeatsinkNeed(spare > 0.0, rth, coolest)


def derated_power(
    case_c: float, rth_jc_k_per_w: float, junction_max_c: float, power_max_w: float
) -> float:
    """Power a device stands at a case temperature: (Tj max - Tc) / Rjc, at most its rating.

    Raises
    ------
    UsageError
        If the resistance is not above zero.
    """
    if not rth_jc_k_per_w > 0.0:
        raise UsageError(f"rth_jc_k_per_w is {rth_jc_k_per_w:g}, expected above 0")
    return min(max(junction_max_c - case_c, 0.0) / rth_jc_k_per_w, power_max_w)


def vbe_slope(part: Transistor, device_a: float, temperature_c: float = 25.0) -> float:
    """Fall of a transistor's base-emitter voltage with temperature at a current, volts per kelvin.

    Central difference of `catalogue.conduction`; a Darlington's holds both its junctions.
    """
    low, high = (
        conduction(part, device_a, temperature_c + side).vbe_v
        for side in (-_SLOPE_STEP_K, _SLOPE_STEP_K)
    )
    return (low - high) / (2.0 * _SLOPE_STEP_K)


def runaway_loop_gain(bias: Bias, rth_ja_k_per_w: float) -> float:
    """Loop gain of heat, theta VCE kappa (1 - m) / (RE + Vt/Iq); runaway from 1 on.

    A kelvin lowers the base-emitter voltage by kappa, of which the bias follows the share m; the
    rest raises the current through RE and the junction's own Vt/Iq. Zero without idle current.
    Valid for signals at rest and a bias voltage that does not sag.

    Parameters
    ----------
    bias : Bias
    rth_ja_k_per_w : float
        Junction to air, for each watt of the device (`HeatPath.total_k_per_w`).
    """
    _at_least(rth_ja_k_per_w, "rth_ja_k_per_w")
    return rth_ja_k_per_w * _watts_per_kelvin(bias)


def largest_stable_rth(bias: Bias) -> float:
    """Junction-to-air resistance at which the loop gain of heat is 1; infinite where it stays 0."""
    slope = _watts_per_kelvin(bias)
    return 1.0 / slope if slope > 0.0 else math.inf


def optimum_idle_current(
    emitter_ohm: float,
    device_emitter_ohm: float = 0.0,
    base_ohm: float = 0.0,
    hfe: float = math.inf,
    temperature_c: float = 25.0,
) -> float:
    """Class-AB idle current of least crossover distortion, Vt / (RE + re' + rb/hFE), in amperes.

    The output resistance at rest then equals that at large currents (B. M. Oliver, "Distortion in
    complementary-pair class-B amplifiers", Hewlett-Packard Journal, February 1971; 26 mV there).
    Meant for single transistors; in a Darlington the second junction's drive is not counted.

    Raises
    ------
    UsageError
        If there is no resistance at all (then more current is always better), or a value is
        outside its range.
    """
    for value, name in (
        (emitter_ohm, "emitter_ohm"),
        (device_emitter_ohm, "device_emitter_ohm"),
        (base_ohm, "base_ohm"),
    ):
        _at_least(value, name)
    if not hfe > 0.0:
        raise UsageError(f"hfe is {hfe:g}, expected above 0")
    total = emitter_ohm + device_emitter_ohm + base_ohm / hfe
    if not total > 0.0:
        raise UsageError(f"emitter resistance is {total:g} ohm in all, expected above 0")
    return thermal_voltage(temperature_c) / total


def settle(
    idle_power: Callable[[float], float],
    rth_ja_k_per_w: float,
    ambient_c: float,
    junction_max_c: float,
) -> Equilibrium:
    """Temperature at which a stage that starts at ambient comes to rest.

    Solves Tj = Ta + theta P(Tj). Where P never falls with temperature, Ta + theta P(T) cannot pass
    the lowest solution from below, so the search steps there, and by a quarter of a kelvin at
    least, until the balance changes sign; the bracket is then closed (Brent's method).

    Parameters
    ----------
    idle_power : callable
        Heat of one device in watts at its junction temperature; asked between the two limits.
    rth_ja_k_per_w : float
        Junction to air, for each watt of the device (`HeatPath.total_k_per_w`).
    ambient_c, junction_max_c : float
        The search begins at the one and ends at the other.

    Raises
    ------
    UsageError
        If the limit is not above ambient, or a power found is negative or not finite.
    """
    _at_least(rth_ja_k_per_w, "rth_ja_k_per_w")
    if not junction_max_c > ambient_c:
        raise UsageError(
            f"junction_max_c is {junction_max_c:g}, expected above the ambient {ambient_c:g} °C"
        )

    def excess(junction_c: float) -> float:
        power = _at_least(idle_power(junction_c), f"idle power at {junction_c:g} °C")
        return ambient_c + rth_ja_k_per_w * power - junction_c

    below, gap = ambient_c, excess(ambient_c)
    above = below
    while gap > 0.0 and above < junction_max_c:
        below, above = above, min(above + max(gap, _LEAST_STEP_K), junction_max_c)
        gap = excess(above)
    settled = gap <= 0.0
    found = above
    if settled and above > below:
        found = float(brentq(excess, below, above, xtol=_SETTLED_K / 10.0))
    residual = abs(excess(found)) if settled else gap
    low = max(found - _SLOPE_STEP_K, ambient_c)
    high = min(found + _SLOPE_STEP_K, junction_max_c)
    return Equilibrium(
        settled=settled,
        junction_c=found,
        power_w=float(idle_power(found)),
        loop_gain=1.0 + (excess(high) - excess(low)) / (high - low),
        residual_k=residual,
        converged=settled and residual < _SETTLED_K,
    )


def _watts_per_kelvin(bias: Bias) -> float:
    """Rise of a device's idle heat for each kelvin of its junction."""
    slope = bias.vbe_slope_v_per_k * (1.0 - bias.tracking)
    # Iq in the numerator, so that no current gives zero.
    resistive = bias.idle_a * bias.emitter_ohm + thermal_voltage(bias.temperature_c)
    return bias.vce_v * slope * bias.idle_a / resistive


def _at_least(value: float, name: str, least: float = 0.0) -> float:
    """Return a value that is finite and not below its bound."""
    if not (math.isfinite(value) and value >= least):
        raise UsageError(f"{name} is {value:g}, expected a finite number of at least {least:g}")
    return float(value)
