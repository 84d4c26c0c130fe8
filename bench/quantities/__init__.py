"""Quantities: a number, a unit, a standard uncertainty; and lengths that cannot be mixed up."""

from bench.quantities.lengths import Opd, PathFactor, StageDisplacement, StagePosition
from bench.quantities.text import Quantity, parse, parse_in, show, show_length
from bench.quantities.units import DIMENSIONS, dimension_of

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
