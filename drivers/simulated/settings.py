"""Every key of a world file, declared once; all simulated drivers carry the same declaration."""

from __future__ import annotations

from drivers.contracts import Setting
from drivers.simulated.glass import GLASSES

__all__ = ["DEVICES", "FAULTS", "WORLD_SETTINGS"]

DEVICES = ("stage", "detector", "changer", "climate")

FAULTS: dict[str, str] = {
    "detector silent": "the detector takes no readings and answers nothing",
    "detector saturated": "every reading stands at the upper end of the range",
    "stage stalled": "the axis stands still in the middle of a move and never says so",
    "unplugged": "a device is gone from its port: the one named by `device`, or all of them",
    "lamp out": "no light from any source; the detector sees its dark level",
    "vibration burst": "the path shakes with `amplitude` of OPD at `frequency`",
}


def _length(
    name: str, doc: str, default: float | None = None, *, low: float | None = None
) -> Setting:
    return Setting(name, "m", doc, default=default, low=low, random=True)


WORLD_SETTINGS: tuple[Setting, ...] = (
    Setting(
        "truth.zero",
        "m",
        "stage reading of zero geometric path difference, glass and phase left out, approached "
        "increasing",
        required=True,
        random=True,
    ),
    Setting(
        "truth.contrast",
        "",
        "fringe amplitude over mean level, before glass, motion and vibration",
        default=0.6,
        low=0.0,
        high=1.0,
        random=True,
    ),
    Setting("truth.phase", "rad", "achromatic phase between the arms", default=0.0, random=True),
    Setting(
        "truth.glass.material", "text", "what arm A has more of", choices=tuple(sorted(GLASSES))
    ),
    _length("truth.glass.thickness", "how much more of it arm A has, air displaced", 0.0),
    Setting("source[].name", "text", "a source of bench.toml", required=True),
    Setting(
        "source[].level",
        "signal",
        "its mean level above dark; signal / contrast where absent",
        low=0.0,
        random=True,
    ),
    _length("stage.start", "where the stage stands at first; 30 % up its travel where absent"),
    Setting(
        "stage.homed", "bool", "whether the stage knows where it is at the start", default=True
    ),
    _length("stage.low_end", "hard end; 2 % of the travel below the soft one where absent"),
    _length("stage.high_end", "hard end; 2 % of the travel above the soft one where absent"),
    _length(
        "stage.reversal_error",
        "reading of one place approached increasing, minus approached decreasing",
        0.0,
    ),
    _length("stage.periodic_error.amplitude", "of the screw, in position", 0.0, low=0.0),
    _length("stage.periodic_error.period", "of the screw, in position", 1e-3, low=1e-6),
    _length(
        "stage.position_noise",
        "standard deviation of the true position about the reported one, new at every reading",
        0.0,
        low=0.0,
    ),
    Setting(
        "stage.scale_error",
        "",
        "true length over reported length, minus one, about the zero",
        default=0.0,
        low=-0.01,
        high=0.01,
        random=True,
    ),
    _length(
        "stage.ringing", "oscillation after an arrival, gone within the settle time", 1e-7, low=0.0
    ),
    Setting(
        "stage.reply_time", "s", "what one question to the stage takes", default=1e-3, low=1e-6
    ),
    Setting(
        "detector.noise",
        "signal",
        "standard deviation of one reading; the bench's expected noise where absent",
        low=0.0,
        random=True,
    ),
    Setting(
        "detector.adc_bits", "int", "of the converter over the range", default=16, low=1, high=32
    ),
    Setting(
        "detector.lag",
        "s",
        "a reading shows the light of so much earlier; the bench's lag where absent",
        random=True,
    ),
    Setting("detector.hum.frequency", "Hz", "pick-up from the mains", default=50.0, low=0.0),
    Setting(
        "detector.hum.amplitude",
        "signal",
        "half its peak to peak",
        default=0.0,
        low=0.0,
        random=True,
    ),
    Setting("drift.path", "m/s", "of OPD; moves the zero the other way", default=0.0, random=True),
    _length("vibration.amplitude", "of OPD, half peak to peak", 0.0, low=0.0),
    Setting("vibration.frequency", "Hz", "of the vibration", default=37.0, low=0.0, random=True),
    Setting("climate.temperature", "K", "of the air", default=293.15, low=200.0, high=400.0),
    Setting("climate.pressure", "Pa", "of the air", default=101325.0, low=1e3, high=2e5),
    Setting("climate.humidity", "", "relative, 0 to 1", default=0.5, low=0.0, high=1.0),
    Setting("fault[].kind", "text", "what goes wrong", required=True, choices=tuple(FAULTS)),
    Setting(
        "fault[].at", "s", "bench time at which it begins", required=True, low=0.0, random=True
    ),
    Setting("fault[].lasts", "s", "how long; for good where absent", low=0.0, random=True),
    Setting("fault[].device", "text", "whom it strikes, for `unplugged`", choices=DEVICES),
    _length("fault[].amplitude", "of OPD, for a `vibration burst`", 3e-7, low=0.0),
    Setting("fault[].frequency", "Hz", "of a `vibration burst`", default=23.0, low=0.0),
)
