"""Text into quantities and back, and lengths that cannot be mixed up.

A quantity is written as a number, optionally its standard uncertainty, and a unit: ``0.55 um``,
``0,55 µm``, ``18.55 +- 0.74 pm``, ``18.55(74) pm``, ``(18.55 ± 0.74) pm``. The number is split off
by a regular expression and only the name of a unit that is not in the small table here is ever
looked up in pint: raw text given to pint reads ``0,55 um`` as 0 um, lets ``nan`` pass and does not
return from ``9**9**9 um``.

Decimal signs follow ISO 80000-1: a point or a comma; digits are grouped by threes with spaces
(plain, no-break or thin). One to three digits, a comma and exactly three digits (``12,500 mm``) may
be meant either way, so it is refused rather than guessed at.
"""

from __future__ import annotations

import difflib
import math
import re
from dataclasses import dataclass
from decimal import Decimal
from functools import cache
from typing import Any

from bench.errors import QuantityError, printable

__all__ = [
    "DIMENSIONS",
    "Opd",
    "PathFactor",
    "Quantity",
    "StageDisplacement",
    "StagePosition",
    "dimension_of",
    "parse",
    "parse_in",
    "show",
    "show_length",
]

# Exponents of metre, second, kilogram, ampere, kelvin, radian, count.
Powers = tuple[int, int, int, int, int, int, int]
_NONE: Powers = (0, 0, 0, 0, 0, 0, 0)
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
    "ratio": (_NONE, "", "45 %"),
    "dispersion": ((0, 2, 0, 0, 0, 0, 0), "s^2", "150 fs^2"),
    "expansion": ((0, 0, 0, 0, -1, 0, 0), "1/K", "8 ppm/K"),
    "wavenumber": ((-1, 0, 0, 0, 0, 0, 0), "1/m", "16000 1/cm"),
}
SIGNALS = ("voltage", "current", "power", "counts")


@dataclass(frozen=True)
class _Unit:
    factor: float
    powers: Powers
    offset: float = 0.0  # kelvin at zero of a temperature scale


def _dim(name: str) -> Powers:
    return DIMENSIONS[name][0]


# The units of a bench, so that reading a description need not import pint; a test holds every row
# against pint. Symbols in the first table take the prefixes of the SI.
_PREFIXED = {
    "m": _Unit(1.0, _dim("length")),
    "s": _Unit(1.0, _dim("time")),
    "Hz": _Unit(1.0, _dim("frequency")),
    "V": _Unit(1.0, _dim("voltage")),
    "A": _Unit(1.0, _dim("current")),
    "W": _Unit(1.0, _dim("power")),
    "K": _Unit(1.0, _dim("temperature")),
    "Pa": _Unit(1.0, _dim("pressure")),
    "bar": _Unit(1e5, _dim("pressure")),
    "rad": _Unit(1.0, _dim("angle")),
}
_PLAIN = {
    "": _Unit(1.0, _NONE),
    "%": _Unit(1e-2, _NONE),
    "ppm": _Unit(1e-6, _NONE),
    "ppb": _Unit(1e-9, _NONE),
    "in": _Unit(0.0254, _dim("length")),
    "mil": _Unit(25.4e-6, _dim("length")),
    "Å": _Unit(1e-10, _dim("length")),
    "min": _Unit(60.0, _dim("time")),
    "h": _Unit(3600.0, _dim("time")),
    "deg": _Unit(math.pi / 180, _dim("angle")),
    "°": _Unit(math.pi / 180, _dim("angle")),
    "count": _Unit(1.0, _dim("counts")),
    "counts": _Unit(1.0, _dim("counts")),
    "degC": _Unit(1.0, _dim("temperature"), 273.15),
    "°C": _Unit(1.0, _dim("temperature"), 273.15),
    "degF": _Unit(5 / 9, _dim("temperature"), 459.67 * 5 / 9),
}
_PREFIXES = {
    "f": 1e-15,
    "p": 1e-12,
    "n": 1e-9,
    "u": 1e-6,
    "m": 1e-3,
    "c": 1e-2,
    "d": 1e-1,
    "h": 1e2,
    "k": 1e3,
    "M": 1e6,
    "G": 1e9,
    "T": 1e12,
}
_COMMON = tuple(
    """
    nm um mm cm m pm in mil Å ms us ns s min h kHz MHz GHz THz Hz mm/s um/s nm/s m/s mm/s^2 m/s^2
    um/s^2 mV V uV nA uA mA A nW uW mW W counts rad mrad urad deg degC K mK Pa hPa kPa mbar % ppm
    fs fs^2 ps^2 1/m 1/cm 1/K ppm/K nm/min um/min
    """.split()  # noqa: SIM905
)

_MICRO = str.maketrans({"\u00b5": "u", "\u03bc": "u", "\u212b": "Å", "\u2212": "-"})
_SUPER = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁻", "0123456789-")
_SPACES = " \u00a0\u2009\u202f\u2007"
_LONGEST = 120

_DIGITS = rf"(?:[0-9]{{1,3}}(?:[{_SPACES}][0-9]{{3}})+|[0-9]+)"
_FRACTION = rf"(?:[0-9]{{3}}(?:[{_SPACES}][0-9]{{3}})*[{_SPACES}][0-9]{{1,3}}|[0-9]+)"
_PLAIN_NUMBER = rf"(?:{_DIGITS}(?:[.,](?:{_FRACTION})?)?|[.,]{_FRACTION})"
_EXPONENT = r"(?:[eE][+-]?[0-9]{1,4})"
_NUMBER = re.compile(
    rf"""(?P<value>[+-]?{_PLAIN_NUMBER})
         (?:\((?P<digits>[0-9]+(?:[.,][0-9]+)?)\))?
         (?P<exponent>{_EXPONENT})?
         (?:\s*(?:±|\+/?-)\s*(?P<plusminus>{_PLAIN_NUMBER}{_EXPONENT}?))?
         (?![0-9.,±(*])""",
    re.VERBOSE,
)
_BRACKETED = re.compile(r"\((?P<inside>[^()]*(?:±|\+/?-)[^()]*)\)")
_FACTOR = re.compile(r"(?P<name>[A-Za-zÅΩ°%_]+)(?:(?:\^|\*\*)?(?P<power>-?[1-9]))?")
_AMBIGUOUS = re.compile(r"[+-]?[1-9][0-9]{0,2},[0-9]{3}")


# --- units -------------------------------------------------------------------------------------


@cache
def _from_pint(name: str) -> _Unit | None:
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
    return _Unit(float(one.magnitude), tuple(powers))  # type: ignore[arg-type]


@cache
def _pint_registry() -> Any:
    import pint

    return pint.UnitRegistry()


def _named(name: str) -> _Unit | None:
    if name in _PLAIN:
        return _PLAIN[name]
    if name in _PREFIXED:
        return _PREFIXED[name]
    scale = _PREFIXES.get(name[:1])
    base = _PREFIXED.get(name[1:])
    if scale is not None and base is not None:
        return _Unit(scale * base.factor, base.powers)
    return _from_pint(name)


@cache
def _unit(text: str) -> _Unit | None:
    """The unit written as ``text``: names, small whole powers, products and quotients."""
    text = re.sub("[⁰¹²³⁴⁵⁶⁷⁸⁹⁻]+", lambda m: "^" + m.group().translate(_SUPER), text)
    text = text.translate(_MICRO)
    if text in _PLAIN:
        return _PLAIN[text]
    if len(text) > 40:
        return None
    factor, powers, sign, at = 1.0, list(_NONE), 1, 0
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
        factor *= unit.factor**power
        powers = [have + power * more for have, more in zip(powers, unit.powers, strict=True)]
        parts += 1
        offset = unit.offset if (parts, power) == (1, 1) else 0.0
        at = match.end()
        rest = text[at:].lstrip()
        if not rest:
            return _Unit(factor, tuple(powers), offset)  # type: ignore[arg-type]
        if rest[0] not in "/*·":
            return None
        sign = -1 if rest[0] == "/" else 1
        at = len(text) - len(rest) + 1


def _known(text: str, where: str) -> _Unit:
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
    powers = _known(unit, "").powers
    return next((name for name, row in DIMENSIONS.items() if row[0] == powers), "")


# --- quantities ----------------------------------------------------------------------------------


@dataclass(frozen=True)
class Quantity:
    """A number with its unit as it was written, and its standard uncertainty where one is known."""

    value: float
    unit: str
    standard_uncertainty: float | None = None

    def to(self, unit: str) -> Quantity:
        """The same in ``unit``. Raises QuantityError where the two do not measure the same."""
        if unit == self.unit:
            return self
        have, want = _known(self.unit, ""), _known(unit, "")
        if have.powers != want.powers:
            raise QuantityError(f"{self} cannot be written in {printable(unit, 40)!r}")
        value = (self.value * have.factor + have.offset - want.offset) / want.factor
        u = self.standard_uncertainty
        return Quantity(value, unit, None if u is None else u * have.factor / want.factor)

    @property
    def si(self) -> float:
        """The value in SI base units: metres, seconds, volts; temperatures in kelvin."""
        unit = _known(self.unit, "")
        return self.value * unit.factor + unit.offset

    @property
    def si_uncertainty(self) -> float | None:
        """The standard uncertainty in the unit of ``si``."""
        u = self.standard_uncertainty
        return None if u is None else u * _known(self.unit, "").factor

    def as_json(self) -> dict[str, Any]:
        """``{"value": .., "unit": .., "standard_uncertainty": ..}``, the last where known."""
        document: dict[str, Any] = {"value": self.value, "unit": self.unit}
        if self.standard_uncertainty is not None:
            document["standard_uncertainty"] = self.standard_uncertainty
        return document

    def __str__(self) -> str:
        return show(self.value, self.standard_uncertainty, self.unit)


def parse(text: str, dimension: str, *, where: str = "") -> Quantity:
    """The quantity that ``text`` states, which must be of ``dimension`` (a key of ``DIMENSIONS``).

    ``signal`` accepts any of voltage, current, power and counts. Only a ``ratio`` may be written
    without a unit. ``where`` names the place for the message. Raises QuantityError, and nothing
    else, whatever the text.
    """
    wanted = SIGNALS if dimension == "signal" else (dimension,)
    example = DIMENSIONS[wanted[0]][2]
    a = "a signal" if dimension == "signal" else f"a{'n' * (dimension[0] in 'aeiou')} {dimension}"
    return _parse(text, {_dim(name) for name in wanted}, a, example, where)


def parse_in(text: str, unit: str, *, where: str = "") -> Quantity:
    """The quantity that ``text`` states, converted to ``unit``. Raises QuantityError."""
    want = _known(unit, where)
    name = dimension_of(unit)
    kind = f"a quantity in {unit}" if not name else f"a{'n' * (name[0] in 'aeiou')} {name}"
    example = DIMENSIONS[name][2] if name else f"1 {unit}"
    return _parse(text, {want.powers}, kind, example, where).to(unit)


def _parse(text: str, wanted: set[Powers], kind: str, example: str, where: str) -> Quantity:
    if not isinstance(text, str):
        raise QuantityError(
            f"{text!r} has no unit",
            where=where,
            why=f"{kind} is due",
            mend=f'write it as text with a unit, such as "{example}"',
        )
    shown = repr(printable(text, 60))
    if len(text) > _LONGEST:
        raise QuantityError(f"{shown} is too long for a quantity", where=where)
    value, uncertainty, unit_text = _split(text, shown, kind, example, where)
    if not unit_text and _NONE not in wanted:
        raise QuantityError(
            f"{shown} has no unit",
            where=where,
            why=f"{kind} is due",
            mend=f'add the unit, such as "{example}"',
        )
    unit = _known(unit_text, where)
    if unit.powers not in wanted:
        raise QuantityError(
            f"{shown} is not {kind}",
            where=where,
            why=f"{unit_text!r} measures {dimension_of(unit_text) or 'something else'}",
            mend=f'write it like "{example}"',
        )
    quantity = Quantity(value, unit_text, uncertainty)
    sizes = (value, quantity.si, uncertainty or 0.0, quantity.si_uncertainty or 0.0)
    if not all(math.isfinite(size) for size in sizes):
        raise QuantityError(f"{shown} is too large a number", where=where)
    if dimension_of(unit_text) == "temperature" and quantity.si < 0:
        raise QuantityError(f"{shown} is below absolute zero", where=where)
    return quantity


def _split(
    text: str, shown: str, kind: str, example: str, where: str
) -> tuple[float, float | None, str]:
    """Value, standard uncertainty in the same unit, and the unit's text."""
    stripped = text.strip().replace("\u2212", "-")
    bracketed = _BRACKETED.match(stripped)
    match = _NUMBER.match(bracketed["inside"].strip() if bracketed else stripped)
    complete = match is not None and (
        bracketed is None or match.end() == len(bracketed["inside"].strip())
    )
    if match is None or not complete:
        finite = re.match(r"[+-]?\(?(nan|inf)", stripped, re.IGNORECASE) is None
        raise QuantityError(
            f"{shown} is not a quantity" if finite else f"{shown} is not a finite number",
            where=where,
            why=f"{kind} is due: a number and a unit",
            mend=f'write it like "{example}"',
        )
    for part in (match["value"], match["plusminus"] or ""):
        if _AMBIGUOUS.fullmatch(part):
            raise QuantityError(
                f"{shown} can be read in two ways",
                where=where,
                why="the comma may be a decimal sign or may group thousands",
                mend=f"write {part.replace(',', '.')} or {part.replace(',', '')}",
            )
    exponent = match["exponent"] or ""
    value_text = _plain(match["value"])
    value = float(value_text + exponent)
    uncertainty: float | None = None
    if match["digits"] is not None and match["plusminus"] is not None:
        raise QuantityError(f"{shown} states its uncertainty twice", where=where)
    if match["digits"] is not None:
        digits = _plain(match["digits"])
        places = len(value_text.partition(".")[2])
        scale = "" if "." in digits else f"e-{places}"
        uncertainty = float(Decimal(digits + scale) * Decimal("1" + exponent))
    elif match["plusminus"] is not None:
        uncertainty = float(_plain(match["plusminus"]))
    rest = stripped[bracketed.end() :] if bracketed else stripped[match.end() :]
    return value, uncertainty, rest.strip()


def _plain(number: str) -> str:
    return re.sub(rf"[{_SPACES}]", "", number).replace(",", ".")


# --- showing -------------------------------------------------------------------------------------


def _grouped(number: str) -> str:
    """Digits in threes from the decimal point, with spaces, as ISO 80000-1 has them."""
    sign = "-" if number.startswith("-") else ""
    whole, point, fraction = number.removeprefix("-").partition(".")
    first = len(whole) % 3
    groups = [whole[:first]] * bool(first) + [whole[i : i + 3] for i in range(first, len(whole), 3)]
    if len(whole) <= 4:
        groups = [whole]
    pieces = [fraction[i : i + 3] for i in range(0, len(fraction), 3)]
    return sign + " ".join(groups) + point + (" ".join(pieces) if len(fraction) > 4 else fraction)


def show(value: float, standard_uncertainty: float | None, unit: str) -> str:
    """``13.218 401(12) mm``: the uncertainty in brackets, to two digits, in the last digits shown.

    The concise form of JCGM 100:2008 (GUM), 7.2.2. Where the decimal point falls among the digits
    of the uncertainty it is written out: ``10.5(1.2) um``. Without a usable
    uncertainty, six digits.
    """
    tail = f" {unit}" if unit else ""
    if not math.isfinite(value):
        return f"not known{tail and f' (in{tail})'}"
    u = standard_uncertainty
    if u is None or not math.isfinite(u) or u <= 0:
        if 1e5 <= abs(value) < 1e9:
            return f"{_grouped(f'{value:.0f}')}{tail}"
        mantissa, e, exponent = f"{value:.6g}".partition("e")
        return f"{_grouped(mantissa)}{e and f'e{int(exponent)}'}{tail}"
    exact = Decimal(f"{u:.1e}")  # two digits, and any carry from 9.96 to 10 done
    last = exact.adjusted() - 1  # power of ten of the last digit shown
    highest = max(exact.adjusted(), Decimal(value).adjusted() if value else last)
    shift = highest if last < -9 or highest > 9 else 0
    last -= shift
    scaled = Decimal(value).scaleb(-shift)
    places = max(-last, 0)
    step = Decimal(1).scaleb(last)
    steps = (scaled / step).to_integral_value() if scaled.adjusted() - last < 27 else None
    if steps is None:  # known to more digits than a float has
        return f"{value!r}{tail}"
    number = f"{steps * step if steps else Decimal(0):.{places}f}"
    size = exact.scaleb(-shift)
    inside = f"{size:.{places}f}" if places and size >= 1 else f"{int(size.scaleb(places))}"
    return f"{_grouped(number)}({inside}){f'e{shift}' if shift else ''}{tail}"


def show_length(value_m: float, u_m: float | None = None) -> str:
    """A length in the unit of a bench that suits it: nm, um, mm or m."""
    size = abs(value_m)
    if u_m is not None and math.isfinite(u_m):
        size = max(size, u_m)
    units = (("nm", 1e9), ("um", 1e6), ("mm", 1e3))
    unit, factor = next((row for row in units if 0 < size * row[1] < 999.5), ("m", 1.0))
    if size == 0:
        unit, factor = "mm", 1e3
    return show(value_m * factor, None if u_m is None else u_m * factor, unit)


# --- lengths that are not the same thing --------------------------------------------------------


@dataclass(frozen=True, order=True)
class StageDisplacement:
    """A difference of two readings of the stage, in metres."""

    m: float

    def __add__(self, other: StageDisplacement) -> StageDisplacement:
        return StageDisplacement(self.m + other.m) if _same(self, other) else NotImplemented

    def __sub__(self, other: StageDisplacement) -> StageDisplacement:
        return StageDisplacement(self.m - other.m) if _same(self, other) else NotImplemented

    def __neg__(self) -> StageDisplacement:
        return StageDisplacement(-self.m)

    def __abs__(self) -> StageDisplacement:
        return StageDisplacement(abs(self.m))


@dataclass(frozen=True, order=True)
class StagePosition:
    """A reading of the stage, in metres."""

    m: float

    def __add__(self, other: StageDisplacement) -> StagePosition:
        if not isinstance(other, StageDisplacement):
            return NotImplemented
        return StagePosition(self.m + other.m)

    def __sub__(self, other: StagePosition) -> StageDisplacement:
        return StageDisplacement(self.m - other.m) if _same(self, other) else NotImplemented


@dataclass(frozen=True, order=True)
class Opd:
    """Optical path difference, arm A minus arm B, as a vacuum length in metres."""

    m: float

    def __add__(self, other: Opd) -> Opd:
        return Opd(self.m + other.m) if _same(self, other) else NotImplemented

    def __sub__(self, other: Opd) -> Opd:
        return Opd(self.m - other.m) if _same(self, other) else NotImplemented

    def __neg__(self) -> Opd:
        return Opd(-self.m)

    def __abs__(self) -> Opd:
        return Opd(abs(self.m))


def _same(one: object, other: object) -> bool:
    return type(one) is type(other)


@dataclass(frozen=True)
class PathFactor:
    """Signed OPD for one metre of stage reading, the air's index included; never zero."""

    opd_per_m: float

    def __post_init__(self) -> None:
        if not math.isfinite(self.opd_per_m) or self.opd_per_m == 0:
            raise QuantityError(
                f"a path factor of {self.opd_per_m} cannot be used",
                why="the stage would not change the path difference",
                mend="2 for a folded arm that moves along its beam",
            )

    def opd(self, displacement: StageDisplacement) -> Opd:
        """The OPD that a displacement of the stage makes."""
        if not isinstance(displacement, StageDisplacement):
            raise TypeError(f"{type(displacement).__name__} is not a StageDisplacement")
        return Opd(displacement.m * self.opd_per_m)

    def displacement(self, opd: Opd) -> StageDisplacement:
        """The displacement of the stage that makes an OPD."""
        if not isinstance(opd, Opd):
            raise TypeError(f"{type(opd).__name__} is not an Opd")
        return StageDisplacement(opd.m / self.opd_per_m)
