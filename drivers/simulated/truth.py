"""What a simulated bench hides: where its zero is, and everything that moves it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from drivers.simulated.glass import GLASSES
from drivers.simulated.motion import Mechanics

__all__ = ["Truth"]


@dataclass(frozen=True)
class Truth:
    """What a run tries to find out. Times are seconds since the world began.

    ``zero_m`` is the reading of zero geometric path difference, approached increasing; what glass,
    drift and the stage's own errors make of it is worked out by the methods.
    """

    zero_m: float
    contrast: float
    phase_rad: float
    glass_material: str | None
    glass_thickness_m: float
    path_factor: float
    air_index: float
    drift_m_s: float
    mechanics: Mechanics

    def glass_path_m(self, wavelength_m: float) -> float:
        """Group path that residual glass adds to arm A, as OPD."""
        if self.glass_material is None:
            return 0.0
        group_index = GLASSES[self.glass_material].group_index(np.asarray([1.0 / wavelength_m]))[0]
        return self.glass_thickness_m * self.air_index * (float(group_index) - 1.0)

    def group_zero_m(self, wavelength_m: float, time_s: float = 0.0) -> float:
        """Stage reading, approached increasing, at which the arms' group delays are equal."""
        offset_m = self.glass_path_m(wavelength_m) + self.drift_m_s * time_s
        mirror_m = self.zero_m - offset_m / (self.air_index * self.path_factor)
        return self.mechanics.reading_m(mirror_m)

    def opd_at(self, reading_m: float, wavelength_m: float, time_s: float = 0.0) -> float:
        """Group OPD left when the stage stands at ``reading_m``, approached increasing."""
        mirror_m = reading_m + float(self.mechanics.errors_m(np.asarray(reading_m)))
        return self.mirror_opd_m(mirror_m, wavelength_m, time_s)

    def mirror_opd_m(self, mirror_m: float, wavelength_m: float, time_s: float = 0.0) -> float:
        """Group OPD with the mirror itself at ``mirror_m``."""
        air_m = self.air_index * self.path_factor * (mirror_m - self.zero_m)
        return air_m + self.glass_path_m(wavelength_m) + self.drift_m_s * time_s
