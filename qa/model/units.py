"""Units as exponents over m, s, deg, dB and degC, and texts such as "50 us" turned into numbers.

Everything inside the program is SI with angles in degrees. pint only turns text into a scale;
the arithmetic of exponents, which checks rule sheets, is here.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from fractions import Fraction
from functools import cache, lru_cache
from typing import Any

import numpy as np

from qa.model.errors import UnitError

BASES = ("m", "s", "deg", "dB", "degC")


@dataclass(frozen=True, slots=True)
class Unit:
    """Exponents over :data:`BASES`.

    Examples
    --------
    >>> str(METRE / SECOND)
    'm/s'
    >>> (METRE * METRE).root(2) == METRE
    True
    """

    exponents: tuple[Fraction, ...] = (Fraction(0),) * 5

    def __mul__(self, other: Unit) -> Unit:
        return Unit(tuple(a + b for a, b in zip(self.exponents, other.exponents, strict=True)))

    def __truediv__(self, other: Unit) -> Unit:
        return Unit(tuple(a - b for a, b in zip(self.exponents, other.exponents, strict=True)))

    def power(self, exponent: Fraction) -> Unit:
        """The unit of a value raised to a constant power."""
        return Unit(tuple(a * exponent for a in self.exponents))

    def root(self, degree: int) -> Unit:
        """The unit of a value's root."""
        return self.power(Fraction(1, degree))

    def __str__(self) -> str:
        return _written(self.exponents)


@cache
def _written(exponents: tuple[Fraction, ...]) -> str:
    if exponents == HERTZ.exponents:
        return "Hz"
    above = [_raised(b, e) for b, e in zip(BASES, exponents, strict=True) if e > 0]
    below = [_raised(b, -e) for b, e in zip(BASES, exponents, strict=True) if e < 0]
    if not above and not below:
        return "1"
    return "/".join(["·".join(above) or "1", *below])


def _raised(base: str, exponent: Fraction) -> str:
    return base if exponent == 1 else f"{base}^{exponent}"


def _base(name: str) -> Unit:
    return Unit(tuple(Fraction(int(b == name)) for b in BASES))


ONE = Unit()
METRE, SECOND, DEGREE, DECIBEL, CELSIUS = (_base(name) for name in BASES)
HERTZ = ONE / SECOND


@dataclass(frozen=True, slots=True)
class Conversion:
    """How a number in some unit becomes SI: ``value * multiply / divide + offset``.

    A division by a whole number keeps 60 us at exactly 6e-05 s, where a multiplication would not.
    """

    unit: Unit
    multiply: float = 1.0
    divide: float = 1.0
    offset: float = 0.0

    @property
    def trivial(self) -> bool:
        """Whether the number stays as it is."""
        return self.multiply == self.divide and self.offset == 0.0

    def to_si(self, value: Any) -> Any:
        """Value(s) in this unit to SI."""
        if self.trivial:
            return value
        scaled = value * self.multiply if self.multiply != 1.0 else value
        scaled = scaled / self.divide if self.divide != 1.0 else scaled
        return scaled + self.offset if self.offset else scaled

    def from_si(self, value: Any) -> Any:
        """SI value(s) to this unit."""
        if self.trivial:
            return value
        return (value - self.offset) * self.divide / self.multiply


# The trade's spellings that a general unit parser does not know, or reads as something else.
_DEFINITIONS = """
tera- = 1e12 = T-
giga- = 1e9 = G-
mega- = 1e6 = M-
kilo- = 1e3 = k-
deci- = 1e-1 = d-
centi- = 1e-2 = c-
milli- = 1e-3 = m-
micro- = 1e-6 = µ- = μ- = u-
nano- = 1e-9 = n-
meter = [length] = m = metre
second = [time] = s = sec
degree = [angle] = deg = ° = degrees_north = degrees_east = degree_north = degree_east = degT
decibel = [level] = dB = db = DB
degree_Celsius = [temperature] = degC = celsius = °C = deg_C = ℃ = degree_C = degrees_C = degreeC = degreesC = degrees_Celsius = Celsius = degree_centigrade
radian = 57.29577951308232 * degree = rad
gradian = 0.9 * degree = grad = gon
arcminute = degree / 60 = arcmin
arcsecond = degree / 3600 = arcsec
minute = 60 * second = min
hour = 3600 * second = h = hr
day = 86400 * second = d
hertz = 1 / second = Hz = hz
foot = 0.3048 * meter = ft = feet
us_survey_foot = 0.3048006096012192 * meter = ftUS
fathom = 1.8288 * meter = fm = ftm
yard = 0.9144 * meter = yd
nautical_mile = 1852 * meter = nmi = NM = nm_
knot = 1852 / 3600 * meter / second = kt = kn = kts = knots_
percent = 0.01 = pct
"""
_ALIASES = {
    "%": "percent",
    "1": "",
    "1e-3": "",
    "-": "",
    "none": "",
    "psu": "",
    "ppt": "",
    "g/kg": "",
    "count": "",
    "c": "degC",
    "khz": "kHz",
    "mhz": "MHz",
    "msec": "ms",
    "usec": "us",
    "nsec": "ns",
    "mps": "m/s",
    "kph": "km/h",
    "km/hr": "km/h",
    "nm/h": "knot",
    "us/ft": "ftUS",
    "degrees true": "deg",
    "deg true": "deg",
    "db re 1 upa": "dB",
    "db re 1upa": "dB",
    "db re 1 µpa": "dB",
    "db re 1 upa @ 1 m": "dB",
    "db re 1 upa at 1 m": "dB",
    "degrees": "deg",
    "secs": "s",
    "kn": "kn",
    "ms-1": "m/s",
}
_OFFSETS = {
    "k": Conversion(CELSIUS, offset=-273.15),
    "kelvin": Conversion(CELSIUS, offset=-273.15),
    "degf": Conversion(CELSIUS, multiply=5.0, divide=9.0, offset=-32.0 * 5.0 / 9.0),
    "°f": Conversion(CELSIUS, multiply=5.0, divide=9.0, offset=-32.0 * 5.0 / 9.0),
    "fahrenheit": Conversion(CELSIUS, multiply=5.0, divide=9.0, offset=-32.0 * 5.0 / 9.0),
}
_PINT_BASES = dict(
    zip(("[length]", "[time]", "[angle]", "[level]", "[temperature]"), range(5), strict=True)
)


@lru_cache(maxsize=1)
def _registry() -> Any:
    import pint

    registry: Any = pint.UnitRegistry(None)
    for line in _DEFINITIONS.strip().splitlines():
        registry.define(line)
    return registry


LONGEST_UNIT = 80
"""No unit's text is longer."""


@lru_cache(maxsize=1024)
def conversion(text: str) -> Conversion:
    """What a unit's name means.

    Parameters
    ----------
    text : str
        A unit by its UDUNITS name or a usual abbreviation: "m", "kt", "m s-1", "µs".

    Raises
    ------
    UnitError
        If the unit is not known.

    Examples
    --------
    >>> conversion("kt").to_si(10.0)
    5.144444444444445
    >>> conversion("ft").to_si(1.0)
    0.3048
    >>> conversion("us").to_si(60)
    6e-05
    """
    asked = text.strip()
    if len(asked) > LONGEST_UNIT:
        raise UnitError("Not a known unit.", found=asked, expected="a unit in a few letters")
    lowered = " ".join(asked.lower().split())
    if lowered in _OFFSETS:
        return _OFFSETS[lowered]
    asked = _ALIASES.get(lowered, asked)
    if not asked:
        return Conversion(ONE)
    expression = re.sub(r"(?<=[A-Za-zµ°])(?:\s*\^\s*)?(-?\d+)", r"**\1", asked)
    expression = re.sub(r"(?<=[\w)])\s+(?=[A-Za-zµ(])", " * ", expression)
    found = None
    if re.search(r"\d", re.sub(r"\*\*-?\d(?!\d)|^1(?=\s*/)", "", expression)):
        raise UnitError(
            "Not a known unit.", found=text, expected="a unit without a number of its own"
        )
    try:
        found = (1 * _registry().parse_units(expression)).to_base_units()
    except Exception as first:  # pint raises many unrelated kinds for a text it cannot read
        try:
            found = (1 * _registry().parse_units(expression.lower())).to_base_units()
        except Exception:
            raise UnitError(
                "Not a known unit.",
                found=text,
                expected='a unit such as "m", "ft", "us", "kHz", "kt", "deg", "dB" or "degC"',
            ) from first
    scale = float(found.magnitude)
    exponents = [Fraction(0)] * 5
    for name, exponent in found.dimensionality.items():
        exponents[_PINT_BASES[name]] += Fraction(exponent).limit_denominator(12)
    inverse = round(1.0 / scale) if scale else 0
    if scale < 1.0 and inverse and math.isclose(scale * inverse, 1.0, rel_tol=1e-12):
        return Conversion(Unit(tuple(exponents)), divide=float(inverse))
    return Conversion(Unit(tuple(exponents)), multiply=scale)


_NUMBER = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)\s*(.*?)\s*\Z", re.DOTALL)


def measure(
    text: str | int | float, expected: Unit | None = None, where: str = ""
) -> tuple[float, Unit]:
    """A number with its unit, turned into SI.

    Parameters
    ----------
    text : str or number
        "50 us", "4 kt", "0 %"; a bare number has no unit.
    expected : Unit, optional
        The unit that the value must have.
    where : str
        Place to name in an error.

    Returns
    -------
    tuple of float and Unit
        Value in SI and its unit.

    Raises
    ------
    UnitError
        If the text is no number with a unit, or the unit is another kind than expected.

    Examples
    --------
    >>> measure("50 us")[0], str(measure("4 kt")[1])
    (5e-05, 'm/s')
    """
    if isinstance(text, bool) or not isinstance(text, str | int | float):
        raise UnitError("Not a number with a unit.", where=where, found=repr(text))
    match = _NUMBER.match(str(text))
    if match is None:
        raise UnitError(
            "Not a number with a unit.",
            where=where,
            found=repr(text),
            expected='a text such as "50 us"',
        )
    number = float(match[1])
    try:
        how = conversion(match[2])
    except UnitError as error:
        raise UnitError(
            error.message, where=where, found=str(text), expected=error.expected
        ) from None
    if expected is not None and how.unit != expected:
        raise UnitError(
            "The unit is of the wrong kind.",
            where=where,
            found=f"{text!r} (unit {how.unit})",
            expected=f"a value in {expected}",
            advice=f'Write it with its unit, for example "{number:g} {_example(expected)}".'
            if how.unit == ONE
            else "",
        )
    value = how.to_si(number)
    if not math.isfinite(value):
        raise UnitError("Not a finite number.", where=where, found=repr(text))
    return float(value), how.unit


def _example(unit: Unit) -> str:
    return {"1": ""}.get(str(unit), str(unit).replace("·", " * "))


def readable(value: float, unit: Unit | str) -> str:
    """A value in the unit a surveyor would say it in, to four figures.

    Examples
    --------
    >>> readable(6e-05, SECOND), readable(3e5, HERTZ), readable(float("nan"), METRE)
    ('60 µs', '300 kHz', 'not known')
    """
    if value is None or not np.isfinite(value):
        return "not known" if value is None or np.isnan(value) else ("∞" if value > 0 else "−∞")
    name = str(unit)
    size = abs(value)
    if name == "s" and 0 < size < 1e-3:
        value, name = value * 1e6, "µs"
    elif name == "s" and 0 < size < 1:
        value, name = value * 1e3, "ms"
    elif name == "Hz" and size >= 1e3:
        value, name = value / 1e3, "kHz"
    elif name == "deg":
        name = "°"
    elif name == "degC":
        name = "°C"
    shown = f"{value:.4g}"
    if "e" in shown and 1e-4 < abs(value) < 1e7:
        shown = f"{value:.0f}"
    shown = shown.replace("-", "−")
    if name == "1":
        return shown
    return f"{shown}{'' if name == '°' else ' '}{name}"
