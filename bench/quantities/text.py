"""Text into quantities and back.

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

import math
import re
from dataclasses import dataclass
from decimal import Decimal
from typing import Any

from bench.errors import QuantityError, printable
from bench.quantities.units import DIMENSIONS, SIGNALS, UNITLESS, Powers, dimension_of, known

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
_AMBIGUOUS = re.compile(r"[+-]?[1-9][0-9]{0,2},[0-9]{3}")


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
        have, want = known(self.unit, ""), known(unit, "")
        if have.powers != want.powers:
            raise QuantityError(f"{self} cannot be written in {printable(unit, 40)!r}")
        value = want.from_si(have.to_si(self.value) + have.offset - want.offset)
        u = self.standard_uncertainty
        return Quantity(value, unit, None if u is None else want.from_si(have.to_si(u)))

    @property
    def si(self) -> float:
        """The value in SI base units: metres, seconds, volts; temperatures in kelvin."""
        unit = known(self.unit, "")
        return unit.to_si(self.value) + unit.offset

    @property
    def si_uncertainty(self) -> float | None:
        """The standard uncertainty in the unit of ``si``."""
        u = self.standard_uncertainty
        return None if u is None else known(self.unit, "").to_si(u)

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
    return _parse(text, {DIMENSIONS[name][0] for name in wanted}, a, example, where)


def parse_in(text: str, unit: str, *, where: str = "") -> Quantity:
    """The quantity that ``text`` states, converted to ``unit``. Raises QuantityError."""
    want = known(unit, where)
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
    if not unit_text and UNITLESS not in wanted:
        raise QuantityError(
            f"{shown} has no unit",
            where=where,
            why=f"{kind} is due",
            mend=f'add the unit, such as "{example}"',
        )
    unit = known(unit_text, where)
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
    if value and Decimal(value).adjusted() - last > 17:  # known to more digits than a float has
        return f"{value!r}{tail}"
    rounded = Decimal(value).scaleb(-last).to_integral_value().scaleb(last)
    highest = max(exact.adjusted(), rounded.adjusted() if rounded else last)
    shift = highest if last < -9 or highest > 9 else 0
    places = max(shift - last, 0)
    number = f"{rounded.scaleb(-shift) if rounded else Decimal(0):.{places}f}"
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
