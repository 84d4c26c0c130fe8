"""Numbers as screens show them, where a standard uncertainty is not at hand."""

from __future__ import annotations

import math

__all__ = ["clock", "level", "position", "round_length"]

_UNITS = (("nm", 1e9), ("um", 1e6), ("mm", 1e3), ("m", 1.0))


def round_length(length_m: float) -> str:
    """Two digits and a unit: ``24 nm``, ``1.2 um``, ``5 mm``."""
    if not math.isfinite(length_m):
        return "not known"
    if length_m == 0:
        return "0 nm"
    size = abs(length_m)
    for unit, factor in _UNITS:
        scaled = float(f"{size * factor:.2g}")
        if scaled < 1000 or unit == "m":
            break
    sign = "-" if length_m < 0 else ""
    if scaled < 0.01:
        return f"{sign}{scaled:.1e} {unit}"
    digits = max(0, 1 - math.floor(math.log10(scaled)))
    text = f"{scaled:.{digits}f}"
    return f"{sign}{text.rstrip('0').rstrip('.') if '.' in text else text} {unit}"


def position(position_m: float) -> str:
    """A live stage reading to ten nanometres: ``13.218 40 mm``."""
    if not math.isfinite(position_m):
        return "not known"
    whole, _, part = f"{position_m * 1e3:.5f}".partition(".")
    return f"{whole}.{part[:3]} {part[3:]} mm"


def level(value: float, unit: str) -> str:
    """A detector's level: ``1.234 V``; counts and other large numbers without decimals."""
    if not math.isfinite(value):
        return "not known"
    tail = f" {unit}" if unit else ""
    if abs(value) >= 1000:
        return f"{value:.0f}{tail}"
    return f"{value:.3f}{tail}"


def clock(duration_s: float) -> str:
    """``1:42``, or ``1:02:03`` from an hour on."""
    if not math.isfinite(duration_s):
        return "?"
    seconds = max(0, int(duration_s))
    hours, rest = divmod(seconds, 3600)
    minutes, seconds = divmod(rest, 60)
    return f"{hours}:{minutes:02}:{seconds:02}" if hours else f"{minutes}:{seconds:02}"
