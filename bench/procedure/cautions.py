"""The usual cautions for what stands on the table. They remind; they never call anything safe.

Paraphrased from common public guidance on IEC 60825-1 (laser classes) and IEC 62471 (risk groups of
lamps, from memory). A class is only ever the one that a person typed from the label: nothing here
works one out, and a missing class gives the strictest text.
"""

from __future__ import annotations

from collections.abc import Iterable

from bench.errors import printable
from bench.spec.model import BenchSpec, SourceSpec

__all__ = ["cautions"]

_LOCAL_RULES = (
    "Local rules come first. Ask the person responsible before you start if anything is unclear."
)

_EVERY_LASER = (
    "Never look along a beam or into an eyepiece while a laser is on. Take off rings and watches. "
    "Put beam stops where beams end."
)

_LASER: dict[str, str] = {
    "1": "Label says laser class 1. Do not open housings or defeat covers.",
    "1M": "Label says laser class 1M: do not view the beam with loupes, telescopes or microscopes.",
    "1C": "Label says laser class 1C: only for the contact use it was made for, in its housing.",
    "2": "Label says laser class 2, visible: do not stare into the beam.",
    "2M": "Label says laser class 2M, visible: do not stare, and do not view with optical "
    "instruments.",
    "3R": "Label says laser class 3R: avoid any direct view of the beam or of its mirror "
    "reflections.",
    "3B": "Label says laser class 3B: direct view harms the eye. Goggles for this wavelength, key "
    "and warning light, nobody without training in the room.",
    "4": "Label says laser class 4: harms eye and skin, also by diffuse reflections, and can start "
    "fires. Goggles for this wavelength, enclosed beam, key, nobody without training.",
}
_LASER_UNKNOWN = (
    "No laser class is given: treat it as the strongest class until the label has been read. "
    "Goggles for its wavelength, enclosed beam, key, nobody without training."
)
_INVISIBLE = (
    "Part of its light is outside 400 to 700 nm and not seen: no blink reflex protects the eye."
)

_LAMP: dict[str, str] = {
    "exempt": "Label says exempt risk group. A bright lamp still dazzles; housings get hot.",
    "1": "Label says risk group 1: do not look into the lamp for long. Housings get hot.",
    "2": "Label says risk group 2: do not stare into the lamp. Housings get hot.",
    "3": "Label says risk group 3: even a brief look into the lamp can harm. Shield it. Housings "
    "get hot.",
}
_LAMP_UNKNOWN = (
    "No risk group is given: do not look into the lamp, shield it, and mind hot housings and high "
    "voltage."
)

_STAGE = (
    "The stage moves by itself. Keep fingers, tools and cables out of its travel, and look that no "
    "optic can hit another within the limits.",
    "The software stop is a program's stop. Know where the power switch of the controller is.",
)


def _source_lines(source: SourceSpec) -> Iterable[str]:
    label = printable(source.name, 60)
    if source.laser_class not in (None, "none"):
        yield f"{label}: {_LASER[source.laser_class or '']}"
    elif source.laser_class is None:
        yield f"{label}: {_LASER_UNKNOWN}"
    if source.laser_class in (None, "none"):
        yield f"{label}: {_LAMP.get(source.risk_group or '', _LAMP_UNKNOWN)}"
    low, high = source.band
    if source.laser_class != "none" and (1.0 / high < 400e-9 or 1.0 / low > 700e-9):
        yield f"{label}: {_INVISIBLE}"


def cautions(bench: BenchSpec) -> tuple[str, ...]:
    """Lines to be read and acknowledged by name before anything moves or shines."""
    contact = printable(bench.safety_contact or "nobody is named in bench.toml", 80)
    lines = [f"{_LOCAL_RULES} Safety contact here: {contact}."]
    if any(source.laser_class != "none" for source in bench.sources):
        lines.append(_EVERY_LASER)
    for source in bench.sources:
        lines.extend(_source_lines(source))
    lines.extend(_STAGE)
    return tuple(lines)
