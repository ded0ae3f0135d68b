"""Numbers as a reader wants them: a unit, few figures, and a thin space between thousands."""

from __future__ import annotations

import math
from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo

THIN = "\u202f"
MINUS = "−"
UNKNOWN = "–"


def count(number: int) -> str:
    """A whole number.

    Examples
    --------
    >>> count(1234567)
    '1\u202f234\u202f567'
    """
    return f"{number:,}".replace(",", THIN).replace("-", MINUS)


def quantity(value: float | None, unit: str, figures: int = 4) -> str:
    """A value in SI, in the unit that a surveyor would say it in.

    Examples
    --------
    >>> quantity(6e-05, "s"), quantity(300e3, "Hz"), quantity(2.0, "1"), quantity(None, "m")
    ('60 µs', '300 kHz', '2', '–')
    """
    if value is None or math.isnan(value):
        return UNKNOWN
    scale, name = _scale(abs(value), unit)
    return _with_unit(_figures(value * scale, figures), name)


def against(value: float | None, limit: float | None, unit: str) -> tuple[str, str]:
    """A value and its limit in one unit, with as many figures as it takes to tell them apart.

    Examples
    --------
    >>> against(1.00004, 1.0, "m")
    ('1.00004 m', '1 m')
    >>> against(0.0004, 0.0452, "s")
    ('0.4 ms', '45.2 ms')
    """
    known = [abs(v) for v in (value, limit) if v is not None and math.isfinite(v)]
    if value is None or limit is None or len(known) < 2:
        return quantity(value, unit), quantity(limit, unit)
    scale, name = _scale(max(known), unit)
    for figures in range(4, 16):
        shown = _figures(value * scale, figures), _figures(limit * scale, figures)
        if shown[0] != shown[1] or value == limit:
            break
    return _with_unit(shown[0], name), _with_unit(shown[1], name)


def axis_unit(greatest: float, unit: str) -> tuple[float, str]:
    """Scale and name of the unit that fits a whole axis.

    Examples
    --------
    >>> axis_unit(0.08, "s")
    (1000.0, 'ms')
    """
    return _scale(greatest, unit)


def _scale(size: float, unit: str) -> tuple[float, str]:
    if unit == "s" and 0 < size < 1e-3:
        return 1e6, "µs"
    if unit == "s" and 0 < size < 1:
        return 1e3, "ms"
    if unit == "Hz" and size >= 1e3:
        return 1e-3, "kHz"
    if unit == "m" and 0 < size < 0.01:
        return 1e3, "mm"
    return 1.0, {"deg": "°", "degC": "°C", "1": ""}.get(unit, unit)


def _figures(value: float, figures: int) -> str:
    if math.isinf(value):
        return "∞" if value > 0 else MINUS + "∞"
    shown = f"{value:.{figures}g}"
    if "e" in shown and 1e-4 < abs(value) < 1e9:
        shown = f"{value:.0f}"
    if len(shown.lstrip("-").partition(".")[0]) > 4 and "e" not in shown:
        whole, dot, part = shown.partition(".")
        shown = f"{int(whole):,}".replace(",", THIN) + dot + part
    return shown.replace("-", MINUS)


def _with_unit(number: str, name: str) -> str:
    if not name or number == UNKNOWN:
        return number
    return f"{number}{'' if name == '°' else ' '}{name}"


def length(metres: float | None) -> str:
    """A length along a line.

    Examples
    --------
    >>> length(640.2), length(12345.0)
    ('640 m', '12.3 km')
    """
    if metres is None:
        return UNKNOWN
    if metres == 0:
        return "0 m"
    if metres < 0:
        return MINUS + length(-metres)
    if metres < 10:
        return f"{metres:.1f} m"
    if metres < 9995:
        return count(round(metres)) + " m"
    return f"{metres / 1000:.1f} km" if metres < 1e6 else count(round(metres / 1000)) + " km"


def duration(seconds: float | None) -> str:
    """A time that something takes.

    Examples
    --------
    >>> duration(8.2), duration(95.0), duration(3900.0)
    ('8 s', '1 min 35 s', '1 h 05 min')
    """
    if seconds is None:
        return UNKNOWN
    if 0 < seconds < 1:
        return "< 1 s"
    whole = round(seconds)
    if whole < 60:
        return f"{whole} s"
    if whole < 600:
        return f"{whole // 60} min {whole % 60:02d} s"
    minutes = round(seconds / 60)
    return f"{minutes} min" if minutes < 60 else f"{minutes // 60} h {minutes % 60:02d} min"


def share(part: float | None) -> str:
    """A share in percent; never 0 % nor 100 % when it is not.

    Examples
    --------
    >>> share(0.00001), share(0.5), share(0.9999), share(1.0), share(0.0)
    ('< 0.1 %', '50 %', '> 99.9 %', '100 %', '0 %')
    """
    if part is None:
        return UNKNOWN
    if 0 < part < 0.001:
        return "< 0.1 %"
    if 0.999 < part < 1:
        return "> 99.9 %"
    percent = 100 * part
    return f"{percent:.1f} %" if 0 < percent < 10 and percent % 1 else f"{percent:.3g} %"


def margin(part: float | None) -> str:
    """How far from the limit, as a share of it, with its sign.

    Examples
    --------
    >>> margin(0.25), margin(-0.031), margin(-1e-6), margin(-74499.0)
    ('+25 %', '−3.1 %', '> −0.1 %', '< −999 %')
    """
    if part is None or math.isnan(part):
        return UNKNOWN
    if part == 0:
        return "0 %"
    if -0.001 < part < 0.001:
        return "< +0.1 %" if part > 0 else f"> {MINUS}0.1 %"
    percent = 100 * part
    if abs(percent) > 999:
        return "> +999 %" if percent > 0 else f"< {MINUS}999 %"
    body = f"{abs(percent):.1f}" if abs(percent) < 10 else f"{abs(percent):,.0f}".replace(",", THIN)
    return ("+" if percent > 0 else MINUS) + body.removesuffix(".0") + " %"


def position(latitude: float, longitude: float) -> tuple[str, str]:
    """A position in degrees and decimal minutes, as plotters take it.

    Examples
    --------
    >>> position(54.5, -3.25001)
    ('54°30.0000′N', '003°15.0006′W')
    """
    longitude = (longitude + 180.0) % 360.0 - 180.0
    return _minutes(latitude, 2, "NS"), _minutes(longitude, 3, "EW")


def _minutes(angle: float, digits: int, names: str) -> str:
    ten_thousandths = round(abs(angle) * 600_000)
    degrees, rest = divmod(ten_thousandths, 600_000)
    return f"{degrees:0{digits}d}°{rest / 10_000:07.4f}′{names[0] if angle >= 0 else names[1]}"


def grid(easting: float, northing: float) -> tuple[str, str]:
    """A position on a grid.

    Examples
    --------
    >>> grid(412345.678, 6012345.0)
    ('412345.7 E', '6012345.0 N')
    """
    return f"{easting:.1f} E", f"{northing:.1f} N"


def moment(text: str | None, zone: str = "UTC") -> str:
    """An ISO 8601 time to the second, without the T; in another time zone if asked.

    Examples
    --------
    >>> moment("2024-05-01T10:02:03.456Z")
    '2024-05-01 10:02:03'
    """
    parsed = parsed_time(text)
    if parsed is None:
        return text or UNKNOWN
    if zone != "UTC":
        parsed = parsed.astimezone(ZoneInfo(zone))
    return parsed.strftime("%Y-%m-%d %H:%M:%S")


def clock(text: str | None, zone: str = "UTC") -> str:
    """Only the time of day."""
    return moment(text, zone).rpartition(" ")[2]


def parsed_time(text: str | None) -> datetime | None:
    """ISO 8601 to a moment in UTC, cut to microseconds; None where it is no such text."""
    if not text:
        return None
    body, _, rest = text.partition(".")
    digits = "".join(c for c in rest if c.isdigit())[:6] if rest else ""
    tail = (
        "+00:00" if text.endswith("Z") or not rest or "+" not in rest else "+" + rest.split("+")[1]
    )
    try:
        parsed = datetime.fromisoformat(body.removesuffix("Z"))
        if parsed.tzinfo is None:
            parsed = datetime.fromisoformat(body.removesuffix("Z") + tail)
    except ValueError:
        return None
    parsed = parsed.astimezone(UTC)
    return parsed.replace(microsecond=int(digits.ljust(6, "0"))) if digits else parsed


def iso(nanoseconds: int) -> str:
    """A time as ISO 8601 in UTC, to the millisecond."""
    seconds, rest = divmod(int(nanoseconds), 1_000_000_000)
    try:
        moment_ = datetime(1970, 1, 1, tzinfo=UTC) + timedelta(seconds=seconds)
    except OverflowError:
        return UNKNOWN
    return moment_.strftime("%Y-%m-%dT%H:%M:%S") + f".{rest // 1_000_000:03d}Z"
