"""The narrowing ruler: how far the zero is known, from the width it began with to one nanometre.

The scale is logarithmic and runs from the middle, one nanometre, to both ends, the half width that
was expected at first. Two jaws stand where the 95 % interval ends now: they close as the run goes.
"""

from __future__ import annotations

import math

from bench.tui.figures import round_length
from bench.tui.glyphs import Glyphs

__all__ = ["FINEST_M", "ruler", "ruler_place"]

FINEST_M = 1e-9


def ruler_place(length_m: float, widest_m: float, reach: int) -> int:
    """Columns from the middle for ``length_m``: 0 at one nanometre, ``reach`` at ``widest_m``."""
    if not length_m > FINEST_M:
        return 0
    share = math.log(length_m / FINEST_M) / math.log(max(widest_m, 10 * FINEST_M) / FINEST_M)
    return max(0, min(reach, round(share * reach)))


def ruler(
    half_width_m: float | None,
    widest_m: float,
    width: int,
    glyphs: Glyphs,
    goal_m: float | None = None,
) -> list[str]:
    """Three rows of ``width`` columns: jaws, scale, labels.

    ``goal_m`` is the half width at which the result can be accepted, marked on the scale.
    """
    reach = (width - 1) // 2
    if reach < 8 or not (math.isfinite(widest_m) and widest_m > 0):
        return []
    middle = reach
    row_width = 2 * reach + 1

    jaws = [" "] * row_width
    if half_width_m is not None and math.isfinite(half_width_m) and half_width_m > 0:
        out = max(1, ruler_place(half_width_m, widest_m, reach))
        for column in range(middle - out + 1, middle + out):
            jaws[column] = glyphs.jaw_fill
        jaws[middle - out], jaws[middle + out] = glyphs.left_jaw, glyphs.right_jaw
    jaws[middle] = glyphs.centre

    scale = [glyphs.scale] * row_width
    labels = [" "] * row_width
    decade = FINEST_M
    while decade < widest_m:
        place = ruler_place(decade, widest_m, reach)
        scale[middle - place] = scale[middle + place] = glyphs.tick
        decade *= 10
    scale[0], scale[-1] = glyphs.left_end, glyphs.right_end

    # The ends first, then round numbers where there is room left.
    named = [widest_m, FINEST_M, 1e-6, 1e-3, 1e-5, 1e-4, 1e-7, 1e-8, 1e-2]
    for length_m in named:
        if length_m > widest_m:
            continue
        name = glyphs.text(round_length(length_m))
        place = ruler_place(length_m, widest_m, reach)
        starts = [
            max(0, min(row_width - len(name), centre - len(name) // 2))
            for centre in {middle - place, middle + place}
        ]
        around = [labels[max(0, start - 2) : start + len(name) + 2] for start in starts]
        if all(cell == " " for cells in around for cell in cells):
            for start in starts:
                labels[start : start + len(name)] = name
    if goal_m is not None and math.isfinite(goal_m) and goal_m > 0:
        place = ruler_place(goal_m, widest_m, reach)
        scale[middle - place] = scale[middle + place] = glyphs.goal
    return ["".join(row) for row in (jaws, scale, labels)]
