"""Calendar dates of MJD (UTC) and back, as plain day counts: for names and headers."""

from datetime import datetime, timedelta

START = datetime(1858, 11, 17)


def iso(mjd: float) -> str:
    """Date and time of `mjd` (0 to 100 000) to the millisecond, such as 2026-03-14T03:12:00.000."""
    moment = START + timedelta(milliseconds=round(mjd * 86_400_000))
    return moment.isoformat(timespec="milliseconds")


def day_of(date: str) -> float | None:
    """MJD at 0 h of a date that starts like 2026-03-14; None if it does not."""
    try:
        return float((datetime.fromisoformat(date[:10]) - START).days)
    except ValueError:
        return None


def night_label(mjd: float) -> str:
    """What a night is called: its mean time to the minute."""
    return iso(mjd)[:16]
