"""The whole bench sheet of a design, section by section."""

import dataclasses
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

from tonesim.bench import Bench
from tonesim.check import StageCheck
from tonesim.clipping import ClipSheet, measure_clip
from tonesim.design import Design
from tonesim.distortion import DistortionSheet, measure_distortion
from tonesim.errors import UsageError
from tonesim.heat import AMBIENT_C, HeatSheet, measure_heat
from tonesim.idle import IdleSheet, measure_idle
from tonesim.pool import Progress
from tonesim.power import PowerSheet, measure_power
from tonesim.response import GainSheet, measure_gain
from tonesim.stability import Stability, estimate_stability
from tonesim.transient import PowerUpSheet, SquareSheet, measure_power_up, measure_squares

# In the order in which one measures, with the share of the time each takes.
SECTIONS = {
    "idle": 0.06,
    "gain": 0.03,
    "clip": 0.02,
    "power": 0.22,
    "heat": 0.07,
    "distortion": 0.48,
    "square": 0.04,
    "stability": 0.03,
    "power-up": 0.05,
}


@dataclass(frozen=True)
class Sheet:
    """A design on the bench; sections not asked for are None.

    `unsettled_steps` counts the steps of all runs that did not settle: with any, no figure that
    moves in time is to be trusted.
    """

    title: str
    design_key_sha256: str
    bench_ohm: float
    rest: StageCheck
    idle: IdleSheet | None
    gain: GainSheet | None
    clip: ClipSheet | None
    power: PowerSheet | None
    heat: HeatSheet | None
    distortion: DistortionSheet | None
    square: SquareSheet | None
    stability: Stability | None
    power_up: PowerUpSheet | None
    unsettled_steps: int

    def as_dict(self) -> dict[str, Any]:
        """Everything as plain values for JSON; what was not measured is left out."""
        plain = _plain(self)
        return {key: value for key, value in plain.items() if value is not None}


def _plain(value: object) -> Any:
    """Dataclasses with what they derive, as plain values; what is not finite as None."""
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        names = [field.name for field in dataclasses.fields(value)]
        names += [
            name
            for name in dir(type(value))
            if isinstance(getattr(type(value), name), property) and name not in names
        ]
        return {name: _plain(getattr(value, name)) for name in names}
    if isinstance(value, tuple) and hasattr(value, "_fields"):
        return {name: _plain(part) for name, part in zip(value._fields, value, strict=True)}
    if isinstance(value, dict):
        return {str(key): _plain(part) for key, part in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(part) for part in value]
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else None
    return value


def check_sections(names: Sequence[str]) -> tuple[str, ...]:
    """Sections asked for, in the order of the bench; all of them where none is named.

    Raises
    ------
    UsageError
        If a name is not known.
    """
    for name in names:
        if name not in SECTIONS:
            raise UsageError(f"no section is called {name!r}, expected {', '.join(SECTIONS)}")
    return tuple(name for name in SECTIONS if name in names or not names)


def measure_sheet(
    design: Design,
    sections: Sequence[str] = (),
    ambient_c: float = AMBIENT_C,
    progress: Progress | None = None,
) -> tuple[Bench, Sheet]:
    """Put a design on the bench and measure the sections asked for.

    Parameters
    ----------
    design : Design
    sections : sequence of str, optional
        Names of `SECTIONS`; all of them where none is named (but stability where a measured,
        static curve stands in the design).
    ambient_c : float
        Air around the heat sinks.
    progress : callable, optional
        Takes the share that is done, 0 to 1; may raise to stop.

    Raises
    ------
    SolverError
        If the design cannot idle.
    """
    wanted = check_sections(sections)
    if not sections and design.measured is not None:
        wanted = tuple(name for name in wanted if name != "stability")
    bench = Bench(design)
    total = sum(SECTIONS[name] for name in wanted)
    done = 0.0

    def begin(name: str) -> Progress:
        start = done

        def tell(share: float) -> None:
            if progress is not None:
                progress(min((start + share * SECTIONS[name]) / total, 1.0))

        tell(0.0)
        return tell

    found: dict[str, Any] = {}
    steps: dict[str, Callable[[Progress], Any]] = {
        "idle": lambda _: measure_idle(bench),
        "gain": lambda _: measure_gain(bench),
        "clip": lambda _: measure_clip(bench),
        "power": lambda tell: measure_power(bench, tell),
        "heat": lambda tell: measure_heat(
            bench, found.get("power") or measure_power(bench, tell), ambient_c
        ),
        "distortion": lambda tell: measure_distortion(bench, tell),
        "square": lambda _: measure_squares(bench),
        "stability": lambda _: estimate_stability(design),
        "power-up": lambda _: measure_power_up(bench),
    }
    for name in wanted:
        found[name] = steps[name](begin(name))
        done += SECTIONS[name]
    if progress is not None:
        progress(1.0)
    return bench, _sheet(bench, found)


def _sheet(bench: Bench, found: dict[str, Any]) -> Sheet:
    # The bench counts for its own probes; sections with probes of their own count for them.
    unsettled = bench.solved.unsettled_steps
    unsettled += sum(getattr(section, "unsettled_steps", 0) for section in found.values())
    return Sheet(
        title=bench.design.title,
        design_key_sha256=bench.rest.design_key_sha256,
        bench_ohm=bench.ohm,
        rest=bench.rest,
        unsettled_steps=unsettled,
        **{name.replace("-", "_"): found.get(name) for name in SECTIONS},
    )
