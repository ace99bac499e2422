"""How the spread of many builds reads on a terminal."""

from tonesim.bench import TONE_HZ
from tonesim.show import print_line, print_table
from tonesim.spread import QUANTITIES, Distribution, Ranking, SpreadReport
from tonesim.units import format_quantity

_MOST_NAMED = 3
_LEAST_PERCENT = 0.001  # of distortion; less is told as such


def show_spread(report: SpreadReport) -> None:
    """Print distributions, what they come from, what was left out and the evidence."""
    print_table(
        f"{report.title}: {report.measured} builds measured of {report.runs}, seed {report.seed}",
        ("", "nominal", "least", "5 %", "median", "95 %", "most", "worst build"),
        [_distribution_row(each) for each in report.distributions],
    )
    print_table(
        "what it comes from",
        ("", "all parts", "first", "second", "third"),
        [_ranking_row(each) for each in report.rankings],
    )
    print_table("drawn within", ("", ""), _tolerance_rows(report))
    for refusal in report.refusals:
        words = "cannot idle" if refusal.cannot_idle else "refused"
        print_line(
            f"{words}: {refusal.count} of {report.runs} ({100.0 * refusal.share:.3g} %), first "
            f"build {refusal.first_build}: {refusal.reason}"
        )
    evidence = report.evidence
    print_line(
        f"Distortion: {TONE_HZ:g} Hz at {format_quantity(report.loud_peak_v, 'V')} and "
        f"{format_quantity(report.quiet_peak_v, 'V')} peak at the op-amp's input, the same for all "
        "builds. Shares: squared rank correlations (Spearman); a part without influence has "
        f"{100.0 * report.chance:.1g} % by chance; all parts: adjusted regression on ranks."
    )
    print_line(
        f"Left over at the nodes {evidence.residual_a:.1e} A, steps that did not settle "
        f"{evidence.unsettled_steps}, tones that did not become steady {evidence.unsteady_tones}."
    )


def _cell(quantity: str, value: float) -> str:
    unit = QUANTITIES[quantity].unit
    if unit == "%" and value < _LEAST_PERCENT:
        return f"below {_LEAST_PERCENT:g} %"
    return format_quantity(value, unit)


def _distribution_row(found: Distribution) -> list[str]:
    values = (
        found.nominal,
        found.least,
        found.at_5_percent,
        found.median,
        found.at_95_percent,
        found.most,
    )
    cells = [_cell(found.quantity, value) for value in values]
    return [QUANTITIES[found.quantity].words, *cells, f"{found.worst_build}"]


def _ranking_row(ranking: Ranking) -> list[str]:
    clear = [each for each in ranking.groups if each.beyond_chance][:_MOST_NAMED]
    named = [f"{each.name} {_percent(each.share)}" for each in clear] or ["nothing beyond chance"]
    named += [""] * (_MOST_NAMED - len(named))
    explained = "-" if ranking.explained is None else _percent(ranking.explained)
    return [QUANTITIES[ranking.quantity].words, explained, *named]


def _percent(share: float) -> str:
    """Shares of a few builds may add up to more than there is, by chance."""
    return f"{100.0 * min(share, 1.0):.0f} %"


def _tolerance_rows(report: SpreadReport) -> list[tuple[str, str]]:
    t = report.tolerances
    offset = "the sheet's maximum" if t.offset_v is None else f"±{format_quantity(t.offset_v, 'V')}"
    return [
        ("resistors", f"±{t.resistors_percent:g} %"),
        ("VBE of transistors", f"±{format_quantity(t.vbe_v, 'V')}"),
        ("hFE of transistors", f"x {t.hfe_least:g} to x {t.hfe_most:g}, within the sheet's window"),
        ("forward voltage of each drop", f"±{format_quantity(t.diode_v, 'V')}"),
        ("op-amp's input offset", offset),
        ("op-amp's current limit and gain-bandwidth", f"±{t.op_amp_percent:g} %"),
        ("reservoirs", f"±{t.reservoir_percent:g} %"),
        ("mains or batteries", f"±{t.supply_percent:g} %"),
    ]
