"""How long a sound level may be listened to before hearing is at risk."""

NIOSH_DBA, NIOSH_HOURS, NIOSH_EXCHANGE_DB = 85.0, 8.0, 3.0  # a working day
WEEKLY_DBA, WEEKLY_HOURS = 80.0, 40.0  # WHO-ITU H.870, adults


def exposure_hours_per_day(level_dba: float) -> float:
    """Hours a day at a level that NIOSH recommends not to exceed: 8 / 2^((L - 85) / 3)."""
    return float(NIOSH_HOURS / 2.0 ** ((level_dba - NIOSH_DBA) / NIOSH_EXCHANGE_DB))


def exposure_hours_per_week(level_dba: float) -> float:
    """Hours a week at a level, WHO-ITU H.870 for adults: as much energy as 40 h at 80 dBA."""
    return float(WEEKLY_HOURS * 10.0 ** ((WEEKLY_DBA - level_dba) / 10.0))


def hearing_notes(level_dba: float) -> tuple[str, ...]:
    """Warn of levels that harm hearing in a working day or week; empty below 80 dBA."""
    if level_dba >= NIOSH_DBA:
        return (
            f"At {level_dba:.0f} dBA hearing is at risk after "
            f"{_duration(exposure_hours_per_day(level_dba))} a day (NIOSH).",
        )
    if level_dba >= WEEKLY_DBA:
        return (
            f"At {level_dba:.0f} dBA hearing is at risk after "
            f"{_duration(exposure_hours_per_week(level_dba))} a week (WHO-ITU H.870).",
        )
    return ()


def _duration(hours: float) -> str:
    if hours >= 1.0:
        return f"{hours:.3g} h"
    return f"{60.0 * hours:.2g} min" if hours >= 1.0 / 60.0 else f"{3600.0 * hours:.2g} s"
