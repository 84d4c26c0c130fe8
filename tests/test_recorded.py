"""Scans that other people recorded or computed, located as their cross-checks say.

The folder is named by the environment variable EVENARM_RECORDED. All files are under the MIT
licence:

* Task_8_final_1, Task_9_yellow, Task_6c_60000: repository martin-he543/second-year-interferometry,
  commit e4c953a, folder ``data``, Copyright (c) 2022 Martin He. A motorised Michelson of a teaching
  laboratory. Zeros in motor microsteps by several methods that agree to the tolerance given; one
  microstep is 37.1 pm of OPD, known to 4 %, from the fringe period of two 10 nm filters, so
  18.55 pm of mirror travel.
* background_visible: repository HagesLab/Interferogram_FFT, commit 93039f7, Copyright (c) 2024
  HagesLab. The background of a birefringent wedge interferometer: no packet.
* white_light_512: repository dccote/Enseignement, commit dd06bfe, folder ``ATELIER/FFT``, Copyright
  (c) 2018 Daniel C. Cote. Computed, each sample multiplied by noise U(0.8, 1.2); the truth is
  OPD -0.01957 um, the scatter of estimates about 0.02 um.
"""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from bench.fringes import Located, locate
from bench.scanfile import ScanFile, ScanOptions, read_scan_file

FOLDER = os.environ.get("EVENARM_RECORDED", "")
pytestmark = pytest.mark.skipif(
    not FOLDER, reason="EVENARM_RECORDED does not name the folder of recorded scans"
)

MICROSTEP = "18.55(74) pm"
MICROSTEP_UM = 18.55e-6
MOTOR = ScanOptions(position_unit=MICROSTEP, path_factor=2.0)
COUNTS = ScanOptions()

PACKETS = [
    ("Task_8_final_1.csv", -1_802_400, 1_500, "dark"),
    ("Task_9_yellow.csv", -1_854_000, 5_000, "bright"),
]


def read(name: str, options: ScanOptions) -> tuple[ScanFile, Located]:
    scan_file = read_scan_file(Path(FOLDER) / name, options)
    return scan_file, locate(scan_file.scan, scan_file.knowledge)


@pytest.mark.parametrize(("name", "zero", "tolerance", "kind"), PACKETS)
@pytest.mark.parametrize(
    "options",
    [MOTOR, ScanOptions(position_unit=MICROSTEP), COUNTS],
    ids=["a length and a path factor", "a length", "counts"],
)
def test_teaching_lab_packets(
    name: str, zero: int, tolerance: int, kind: str, options: ScanOptions
) -> None:
    scan_file, located = read(name, options)
    assert located.found, located.reason
    assert located.zero is not None
    assert located.fringe_zero is not None
    unit = MICROSTEP_UM * 1e-6 if scan_file.unit == "um" else 1.0
    assert located.zero.value / unit == pytest.approx(zero, abs=tolerance)
    assert 0.0 < located.zero.standard_uncertainty / unit < tolerance
    assert located.fringe_zero.kind == kind
    lengths_known = options is MOTOR
    assert (located.mean_wavelength_m is not None) == lengths_known
    assert ("no-length" in {notice.code for notice in located.notices}) != lengths_known


def test_the_filter_of_the_yellow_packet() -> None:
    _, located = read("Task_9_yellow.csv", MOTOR)
    # the filter is sold as 543.5 nm, 10 nm wide: 543.5^2 / 10 = 29.5 um; the axis is known to 4 %
    assert located.mean_wavelength_m is not None
    assert located.coherence is not None
    assert located.coherence.rule_m is not None
    assert located.mean_wavelength_m.value == pytest.approx(543.5e-9, rel=0.04)
    assert located.mean_wavelength_m.standard_uncertainty > 0.03 * 543.5e-9
    assert located.coherence.rule_m.value == pytest.approx(29.5e-6, rel=0.15)


@pytest.mark.parametrize("name", ["Task_6c_60000.csv", "background_visible.csv"])
@pytest.mark.parametrize("options", [MOTOR, COUNTS], ids=["a length", "as it is"])
def test_a_laser_and_a_background_are_refused(name: str, options: ScanOptions) -> None:
    _, located = read(name, options)
    assert not located.found
    assert located.zero is None
    assert located.reason


def test_the_laser_is_called_monochromatic() -> None:
    _, located = read("Task_6c_60000.csv", COUNTS)
    assert "monochromatic" in {notice.code for notice in located.notices}


def test_multiplicative_noise() -> None:
    scan_file, located = read("white_light_512.csv", COUNTS)
    assert scan_file.axis == "opd"
    assert located.zero is not None
    assert located.zero.value * 1e6 == pytest.approx(-0.01957, abs=0.02)
    assert abs(located.zero.value + 0.01957e-6) < 3.0 * located.zero.standard_uncertainty
