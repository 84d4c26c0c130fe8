"""Names of units to factors and dimensions, without a parser that evaluates anything.

The common units of a bench are a table; a name that is not in it is looked up in pint, name by
name, so that pint is imported only where it is needed and never sees a number or an operator.
"""

from __future__ import annotations

import difflib
import math
import re
from dataclasses import dataclass
from functools import cache
from typing import Any

from bench.errors import QuantityError, printable

# Exponents of metre, second, kilogram, ampere, kelvin, radian, count.
Powers = tuple[int, int, int, int, int, int, int]
UNITLESS: Powers = (0, 0, 0, 0, 0, 0, 0)
_BASES = ("meter", "second", "kilogram", "ampere", "kelvin", "radian", "count")

# For each dimension: the powers, the SI unit that ``si`` is in, and an example for messages.
DIMENSIONS: dict[str, tuple[Powers, str, str]] = {
    "length": ((1, 0, 0, 0, 0, 0, 0), "m", "0.55 um"),
    "time": ((0, 1, 0, 0, 0, 0, 0), "s", "50 ms"),
    "speed": ((1, -1, 0, 0, 0, 0, 0), "m/s", "1 mm/s"),
    "acceleration": ((1, -2, 0, 0, 0, 0, 0), "m/s^2", "10 mm/s^2"),
    "frequency": ((0, -1, 0, 0, 0, 0, 0), "Hz", "1 kHz"),
    "voltage": ((2, -3, 1, -1, 0, 0, 0), "V", "5 mV"),
    "current": ((0, 0, 0, 1, 0, 0, 0), "A", "2 nA"),
    "power": ((2, -3, 1, 0, 0, 0, 0), "W", "3 uW"),
    "counts": ((0, 0, 0, 0, 0, 0, 1), "counts", "1200 counts"),
    "angle": ((0, 0, 0, 0, 0, 1, 0), "rad", "0.7 rad"),
    "temperature": ((0, 0, 0, 0, 1, 0, 0), "K", "20 degC"),
    "pressure": ((-1, -2, 1, 0, 0, 0, 0), "Pa", "101.3 kPa"),
    "ratio": (UNITLESS, "", "45 %"),
    "dispersion": ((0, 2, 0, 0, 0, 0, 0), "s^2", "150 fs^2"),
    "expansion": ((0, 0, 0, 0, -1, 0, 0), "1/K", "8 ppm/K"),
    "wavenumber": ((-1, 0, 0, 0, 0, 0, 0), "1/m", "16000 1/cm"),
}
SIGNALS = ("voltage", "current", "power", "counts")


@dataclass(frozen=True)
class Unit:
    """SI = value x ``times`` / ``over`` + ``offset``; the two keep 600 nm at 6e-07 exactly."""

    times: float
    powers: Powers
    offset: float = 0.0  # kelvin at zero of a temperature scale
    over: float = 1.0

    def to_si(self, value: float) -> float:
        return value * self.times / self.over

    def from_si(self, value: float) -> float:
        return value * self.over / self.times


def _dim(name: str) -> Powers:
    return DIMENSIONS[name][0]


# The units of a bench, so that reading a description need not import pint; a test holds every row
# against pint. Symbols in the first table take the prefixes of the SI.
_PREFIXED = {
    "m": Unit(1.0, _dim("length")),
    "s": Unit(1.0, _dim("time")),
    "Hz": Unit(1.0, _dim("frequency")),
    "V": Unit(1.0, _dim("voltage")),
    "A": Unit(1.0, _dim("current")),
    "W": Unit(1.0, _dim("power")),
    "K": Unit(1.0, _dim("temperature")),
    "Pa": Unit(1.0, _dim("pressure")),
    "rad": Unit(1.0, _dim("angle")),
}
_PLAIN = {
    "": Unit(1.0, UNITLESS),
    "%": Unit(1.0, UNITLESS, over=1e2),
    "ppm": Unit(1.0, UNITLESS, over=1e6),
    "ppb": Unit(1.0, UNITLESS, over=1e9),
    "in": Unit(254.0, _dim("length"), over=1e4),
    "thou": Unit(254.0, _dim("length"), over=1e7),
    "Å": Unit(1.0, _dim("length"), over=1e10),
    "min": Unit(60.0, _dim("time")),
    "h": Unit(3600.0, _dim("time")),
    "bar": Unit(1e5, _dim("pressure")),
    "mbar": Unit(1e2, _dim("pressure")),
    "deg": Unit(math.pi, _dim("angle"), over=180.0),
    "°": Unit(math.pi, _dim("angle"), over=180.0),
    "count": Unit(1.0, _dim("counts")),
    "counts": Unit(1.0, _dim("counts")),
    "degC": Unit(1.0, _dim("temperature"), 273.15),
    "°C": Unit(1.0, _dim("temperature"), 273.15),
    "degF": Unit(5.0, _dim("temperature"), 459.67 * 5 / 9, 9.0),
}
_PREFIXES: dict[str, tuple[float, float]] = {  # times, over
    "f": (1.0, 1e15),
    "p": (1.0, 1e12),
    "n": (1.0, 1e9),
    "u": (1.0, 1e6),
    "m": (1.0, 1e3),
    "c": (1.0, 1e2),
    "d": (1.0, 1e1),
    "h": (1e2, 1.0),
    "k": (1e3, 1.0),
    "M": (1e6, 1.0),
    "G": (1e9, 1.0),
    "T": (1e12, 1.0),
}
_COMMON = tuple(
    """
    nm um mm cm m pm in thou Å ms us ns s min h kHz MHz GHz THz Hz mm/s um/s nm/s m/s mm/s^2 m/s^2
    um/s^2 mV V uV nA uA mA A nW uW mW W counts rad mrad urad deg degC K mK Pa hPa kPa mbar % ppm
    fs fs^2 ps^2 1/m 1/cm 1/K ppm/K nm/min um/min
    """.split()  # noqa: SIM905
)

_MICRO = str.maketrans({"\u00b5": "u", "\u03bc": "u", "\u212b": "Å", "\u2212": "-"})
_SUPER = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁻", "0123456789-")
_FACTOR = re.compile(r"(?P<name>[A-Za-zÅΩ°%_]+)(?:(?:\^|\*\*)?(?P<power>-?[1-9]))?")


@cache
def _from_pint(name: str) -> Unit | None:
    """A unit by its bare name, from pint's registry; None where there is none that is linear."""
    import pint

    registry = _pint_registry()
    try:
        one, two, nought = (registry.Quantity(v, name).to_base_units() for v in (1.0, 2.0, 0.0))
    except (pint.errors.PintError, ArithmeticError, AttributeError, TypeError, ValueError):
        return None
    if nought.magnitude != 0 or not math.isclose(two.magnitude, 2 * one.magnitude):
        return None  # decibels and the like
    powers = [0] * len(_BASES)
    for base, power in one.unit_items():
        if base not in _BASES or power != int(power):
            return None
        powers[_BASES.index(base)] = int(power)
    return Unit(float(one.magnitude), tuple(powers))  # type: ignore[arg-type]


@cache
def _pint_registry() -> Any:
    import pint

    return pint.UnitRegistry()


def _named(name: str) -> Unit | None:
    if name in _PLAIN:
        return _PLAIN[name]
    if name in _PREFIXED:
        return _PREFIXED[name]
    scale = _PREFIXES.get(name[:1])
    base = _PREFIXED.get(name[1:])
    if scale is not None and base is not None:
        return Unit(scale[0] * base.times, base.powers, over=scale[1] * base.over)
    return _from_pint(name)


@cache
def _unit(text: str) -> Unit | None:
    """The unit written as ``text``: names, small whole powers, products and quotients."""
    text = re.sub("[⁰¹²³⁴⁵⁶⁷⁸⁹⁻]+", lambda m: "^" + m.group().translate(_SUPER), text)
    text = text.translate(_MICRO)
    if text in _PLAIN:
        return _PLAIN[text]
    if len(text) > 40:
        return None
    powers, sign, at = list(UNITLESS), 1, 0
    times, over = 1.0, 1.0
    if re.match(r"1\s*/", text):
        sign, at = -1, text.index("/") + 1
    offset, parts = 0.0, 0
    while True:
        at += len(text[at:]) - len(text[at:].lstrip())
        match = _FACTOR.match(text, at)
        if match is None:
            return None
        unit = _named(match["name"])
        if unit is None:
            return None
        power = sign * int(match["power"] or 1)
        times *= unit.times**power if power > 0 else unit.over**-power
        over *= unit.over**power if power > 0 else unit.times**-power
        powers = [have + power * more for have, more in zip(powers, unit.powers, strict=True)]
        parts += 1
        offset = unit.offset if (parts, power) == (1, 1) else 0.0
        at = match.end()
        rest = text[at:].lstrip()
        if not rest:
            return Unit(times, tuple(powers), offset, over)  # type: ignore[arg-type]
        if rest[0] not in "/*·":
            return None
        sign = -1 if rest[0] == "/" else 1
        at = len(text) - len(rest) + 1


def known(text: str, where: str) -> Unit:
    unit = _unit(text)
    if unit is None:
        folded = {name.casefold(): name for name in reversed(_COMMON)}
        near = difflib.get_close_matches(text.translate(_MICRO).casefold(), folded, 1, 0.5)
        mend = f"the nearest unit known is {folded[near[0]]!r}" if near else "write an SI unit"
        raise QuantityError(f"{printable(text, 40)!r} is not a unit", where=where, mend=mend)
    return unit


def dimension_of(unit: str) -> str:
    """The name in ``DIMENSIONS`` of what ``unit`` measures, or ``""`` where it has no name here.

    Raises QuantityError where ``unit`` is not a unit.
    """
    powers = known(unit, "").powers
    return next((name for name, row in DIMENSIONS.items() if row[0] == powers), "")
