"""A [[source]] of bench.toml into a spectrum with its coherence lengths."""

from __future__ import annotations

import math
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

from bench.errors import InputError
from bench.optics.coherence import coherence_lengths
from bench.optics.spectra import (
    Spectrum,
    blackbody,
    gaussian,
    lorentzian,
    rectangular,
    tabulated,
)
from bench.quantities import Quantity
from bench.spec.model import SourceSpec
from bench.spec.problems import Problems
from bench.spec.spectrumfile import read_spectrum

if TYPE_CHECKING:
    from bench.spec import schema

_LIGHT_M_PER_S = 299792458.0  # exact, by definition of the metre
_SHAPES = {"gaussian": gaussian, "lorentzian": lorentzian, "rectangular": rectangular}

__all__ = ["build_source"]


def build_source(
    table: schema.Source, raw: object, path: str, folder: Path, problems: Problems
) -> SourceSpec | None:
    """The source in SI numbers; None, and problems added, where its spectrum cannot be had."""
    described = _described(table, raw, path, problems)
    if described is None:
        return None
    file = described.pop("file", None)
    try:
        if file is not None:
            wavelength_m, power = read_spectrum(folder / str(file))
            described = {"wavelength_m": wavelength_m.tolist(), "power": power.tolist()}
            spectrum = tabulated(wavelength_m, power)
        elif described["shape"] == "blackbody":
            spectrum = blackbody(described["temperature_k"], described["band_m"])
        else:
            shape = _SHAPES[described["shape"]]
            spectrum = shape(described["centre_m"], described["fwhm_m"])
    except InputError as error:
        text = "; ".join(part for part in (error.what, error.why, error.mend) if part)
        key = "file" if table.spectrum is None else "spectrum.file"
        problems.add(f"{path}.{key}", str(file), f"{text} ({error.where})")
        return None
    except ValueError as error:
        problems.add(f"{path}.spectrum", _raw_spectrum(raw), str(error))
        return None
    return _spec(table, spectrum, described)


def _described(
    table: schema.Source, raw: object, path: str, problems: Problems
) -> dict[str, Any] | None:
    """The spectrum in the words of ``for_drivers``, or {"file": name}."""
    if problems.about(f"{path}.spectrum", f"{path}.file"):
        return None
    given = table.spectrum
    if (given is None) == (table.file is None):
        allowed = 'one of spectrum = { .. } and file = ".."'
        if given is None:
            problems.missing(f"{path}.spectrum", allowed)
        else:
            problems.add(f"{path}.file", table.file, allowed)
        return None
    if given is None or given.file is not None:
        stray = [] if given is None else [k for k in given.model_fields_set if k != "file"]
        if stray:
            problems.add(f"{path}.spectrum", _raw_spectrum(raw), "file stands alone")
            return None
        return {"file": table.file if given is None else given.file}
    if given.shape is None:
        problems.missing(
            f"{path}.spectrum.shape", "gaussian, lorentzian, rectangular or blackbody, or file"
        )
        return None
    wanted = ("temperature", "band") if given.shape == "blackbody" else ("centre", "fwhm")
    complete = True
    for key in ("centre", "fwhm", "temperature", "band"):
        value = getattr(given, key)
        if key in wanted and value is None:
            problems.missing(f"{path}.spectrum.{key}", f"a {given.shape} spectrum needs it")
            complete = False
        elif key not in wanted and value is not None:
            problems.add(
                f"{path}.spectrum.{key}",
                _raw_spectrum(raw).get(key, ""),
                f"a {given.shape} spectrum has {wanted[0]} and {wanted[1]} only",
            )
            complete = False
    if not complete:
        return None
    if given.shape == "blackbody":
        return {"shape": given.shape, "temperature_k": given.temperature, "band_m": given.band}
    centre_m = float(given.centre or math.nan)
    fwhm_m = _width_m(centre_m, given.fwhm)
    return {"shape": given.shape, "centre_m": centre_m, "fwhm_m": fwhm_m}


def _raw_spectrum(raw: object) -> Mapping[str, Any]:
    value = raw.get("spectrum") if isinstance(raw, Mapping) else None
    return value if isinstance(value, Mapping) else {}


def _width_m(centre_m: float, width: float | Quantity) -> float:
    """Width in wavelength so that the edges centre +- half of it are ``width`` apart.

    For a width in frequency, w = width / c between the wavenumbers: f / (centre^2 - f^2/4) = w,
    solved so that nothing cancels for a narrow line.
    """
    if not isinstance(width, Quantity):
        return width
    per_m = width.si / _LIGHT_M_PER_S
    return 2.0 * per_m * centre_m**2 / (1.0 + math.sqrt(1.0 + (per_m * centre_m) ** 2))


def _spec(table: schema.Source, spectrum: Spectrum, described: Mapping[str, Any]) -> SourceSpec:
    lengths = coherence_lengths(spectrum)
    return SourceSpec(
        name=table.name,
        wavenumber=spectrum.wavenumber,
        power=spectrum.power,
        signal=math.nan if table.signal is None else table.signal.si,
        change_time_s=table.change_time,
        warm_up_s=table.warm_up,
        laser_class=table.laser_class,
        risk_group=table.risk_group,
        position=table.position,
        mean_wavelength_m=spectrum.mean_wavelength_m,
        band=spectrum.half_power_band,
        coherence_fwhm_m=lengths.fwhm_m,
        coherence_rule_m=lengths.rule_m,
        coherence_integral_m=lengths.integral_m,
        described=described,
    )
