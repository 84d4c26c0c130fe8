"""The tables of bench.toml, one class a table: which keys there are and what may stand in them.

The description of a field is what a person reads when the key is missing or wrong. Imported lazily,
because pydantic is slow to import.
"""

from __future__ import annotations

import math
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field
from pydantic_core import PydanticCustomError

from bench.errors import QuantityError
from bench.quantities import Quantity, parse

WAVELENGTHS_M = (0.2e-6, 20e-6)


def refused(text: str, mend: str = "") -> PydanticCustomError:
    """An error whose text is shown as it is, and then how to mend it."""
    return PydanticCustomError("evenarm", "{text}", {"text": text, "mend": mend})


def _quantity(
    text: Any, dimension: str, above: float, least: float, most: float, limits: str
) -> Quantity:
    try:
        found = parse(text, dimension)
    except QuantityError as error:
        # Brackets in one line: the message stands in a list of problems.
        parts = [error.what, error.why and f"({error.why})"]
        raise refused(" ".join(part for part in parts if part), error.mend) from None
    if not found.si > above or not least <= found.si <= most:
        raise refused(f"must be {limits}")
    return found


def _si(
    dimension: str,
    *,
    above: float = -math.inf,
    least: float = -math.inf,
    most: float = math.inf,
    limits: str = "",
) -> BeforeValidator:
    return BeforeValidator(lambda text: _quantity(text, dimension, above, least, most, limits).si)


def _positive(dimension: str) -> BeforeValidator:
    return _si(dimension, above=0.0, limits="more than zero")


def _not_negative(dimension: str) -> BeforeValidator:
    return _si(dimension, least=0.0, limits="zero or more")


def _signal(*, above: float = -math.inf) -> BeforeValidator:
    return BeforeValidator(
        lambda text: _quantity(text, "signal", above, -math.inf, math.inf, "more than zero")
    )


def _rising(what: str) -> AfterValidator:
    def check(pair: tuple[Any, Any]) -> tuple[Any, Any]:
        low, high = (item.si if isinstance(item, Quantity) else item for item in pair)
        if not low < high:
            raise refused(f"{what}: the lower end comes first and the two must differ")
        return pair

    return AfterValidator(check)


Length = Annotated[float, _si("length")]
PositiveLength = Annotated[float, _positive("length")]
AnyLength = Annotated[float, _not_negative("length")]
Wavelength = Annotated[
    float, _si("length", least=WAVELENGTHS_M[0], most=WAVELENGTHS_M[1], limits="200 nm to 20 um")
]
Duration = Annotated[float, _not_negative("time")]
Speed = Annotated[float, _positive("speed")]
Acceleration = Annotated[float, _positive("acceleration")]
Rate = Annotated[float, _positive("frequency")]
SignalText = Annotated[Any, _signal()]
PositiveSignal = Annotated[Any, _signal(above=0.0)]
LengthPair = Annotated[tuple[Length, Length], Field(strict=False), _rising("limits")]
SignalPair = Annotated[tuple[SignalText, SignalText], Field(strict=False), _rising("range")]
Band = Annotated[tuple[Wavelength, Wavelength], Field(strict=False), _rising("band")]
Name = Annotated[str, Field(min_length=1, max_length=80, pattern=r"^[^\x00-\x1f\x7f-\x9f]+$")]
Settings = dict[str, Any]


def _width(text: Any) -> float | Quantity:
    """A width in wavelength (metres), or a frequency kept as a quantity."""
    try:
        return _quantity(text, "length", 0.0, -math.inf, math.inf, "more than zero").si
    except PydanticCustomError as error:
        try:
            return _quantity(text, "frequency", 0.0, -math.inf, math.inf, "more than zero")
        except PydanticCustomError:
            raise error from None


def _possible_factor(value: float) -> float:
    if value == 0:
        raise refused("must not be zero: the stage would not change the path difference")
    if not 1e-3 <= abs(value) <= 100:
        raise refused("must be from 0.001 to 100, with either sign; 2 for a folded arm")
    return value


class Table(BaseModel):
    """What all tables share: no unknown keys, no silent conversions, no NaN."""

    model_config = ConfigDict(extra="forbid", strict=True, allow_inf_nan=False, frozen=True)


class Bench(Table):
    name: Name = Field(description="a name people will recognise in the records")
    path_factor: Annotated[float, AfterValidator(_possible_factor)] | None = Field(
        None,
        description="signed change of the path difference A minus B for one unit of stage reading, "
        "such as 2 for a folded arm A that gets longer with increasing reading",
    )
    moving_arm: Literal["A", "B"] | None = Field(None, description='"A" or "B"')
    increasing: Literal["longer", "shorter"] | None = Field(
        None,
        description='"longer" or "shorter": what the moving arm gets as the reading increases',
    )
    folds: float = Field(
        2.0,
        ge=1e-3,
        le=100,
        description="path for one unit of stage reading, without sign; 2 when folded",
    )
    reference_wavelength: Wavelength | None = Field(
        None, description='vacuum wavelength where the zero is defined, such as "600 nm"'
    )
    safety_contact: Name | None = Field(None, description="who answers for laser safety here")
    allow_unattended: bool = Field(False, description="true or false")


class Accept(Table):
    residual_opd: PositiveLength = Field(200e-9, description='such as "200 nm"')
    scans_agree: PositiveLength = Field(100e-9, description='of path difference, such as "100 nm"')
    coverage_factor: float = Field(2.0, ge=1, le=10, description="a number from 1 to 10, often 2")


class Stage(Table):
    driver: Name = Field(description="the name of a stage driver, see: evenarm drivers")
    travel: LengthPair | None = Field(
        None, description='soft limits, such as ["0 mm", "25 mm"]; without them nothing moves'
    )
    speed: Speed = Field(description='greatest speed, such as "1 mm/s"')
    acceleration: Acceleration = Field(10e-3, description='such as "10 mm/s^2"')
    resolution: PositiveLength = Field(100e-9, description='smallest step, such as "20 nm"')
    settle: Duration = Field(0.1, description='wait after a move, such as "50 ms"')
    approach: Literal["increasing", "decreasing"] = Field(
        "increasing", description='"increasing" or "decreasing"'
    )
    reversal_allowance: AnyLength = Field(20e-6, description='such as "20 um"')
    longest_move: PositiveLength | None = Field(
        None, description='the most that one command may ask for, such as "5 mm"'
    )
    scale_uncertainty: float = Field(
        1e-3, ge=0, le=0.1, description="relative, a number from 0 to 0.1, such as 1e-3"
    )
    settings: Settings = Field(default_factory=dict, description="a table of the driver's own keys")


class Detector(Table):
    driver: Name = Field(description="the name of a detector driver, see: evenarm drivers")
    rate: Rate = Field(description='readings in a second, such as "1 kHz"')
    integration: Annotated[float, _positive("time")] | None = Field(
        None, description='of one reading, such as "0.2 ms"; at most one over the rate'
    )
    lag: Annotated[float, _si("time", least=-1.0, most=10.0, limits="-1 s to 10 s")] = Field(
        0.0, description='such as "0 ms"'
    )
    range: SignalPair | None = Field(None, description='such as ["0 V", "5 V"]')
    dark: SignalText | None = Field(None, description='signal without light, such as "0.02 V"')
    noise: PositiveSignal | None = Field(None, description='of one reading, such as "5 mV"')
    settings: Settings = Field(default_factory=dict, description="a table of the driver's own keys")


class Spectrum(Table):
    shape: Literal["gaussian", "lorentzian", "rectangular", "blackbody"] | None = Field(
        None, description="gaussian, lorentzian, rectangular or blackbody"
    )
    centre: Wavelength | None = Field(None, description='vacuum wavelength, such as "600 nm"')
    fwhm: Annotated[Any, BeforeValidator(_width)] = Field(
        None, description='full width at half power, such as "60 nm", or "1 MHz" for a laser'
    )
    temperature: Annotated[float, _positive("temperature")] | None = Field(
        None, description='of a black body, such as "2856 K"'
    )
    band: Band | None = Field(
        None, description='what reaches the detector of a black body: ["420 nm", "900 nm"]'
    )
    file: Name | None = Field(
        None, description="a CSV file of wavelength and relative power, or a JCAMP-DX file"
    )


class Source(Table):
    name: Name = Field(description="a name the operator will recognise")
    spectrum: Spectrum | None = Field(
        None, description='such as { shape = "gaussian", centre = "600 nm", fwhm = "60 nm" }'
    )
    file: Name | None = Field(None, description="a file in place of a spectrum table")
    signal: PositiveSignal = Field(
        description='fringe amplitude expected at zero path difference, such as "1 V"'
    )
    change_time: Duration = Field(0.0, description='cost of switching to it, such as "20 s"')
    warm_up: Duration = Field(0.0, description='such as "10 min"')
    laser_class: Literal["none", "1", "1M", "1C", "2", "2M", "3R", "3B", "4"] | None = Field(
        None, description='"none", "1", "1M", "1C", "2", "2M", "3R", "3B" or "4", as the label says'
    )
    risk_group: Literal["exempt", "1", "2", "3"] | None = Field(
        None, description='"exempt", "1", "2" or "3", for a lamp'
    )
    position: Name | None = Field(None, description="where the source changer has it, as text")


class Expect(Table):
    zero: Annotated[
        Any, BeforeValidator(lambda t: _quantity(t, "length", -math.inf, -math.inf, math.inf, ""))
    ] = Field(description='stage reading where the zero is expected, such as "12.5 mm"')
    half_width: PositiveLength | None = Field(
        None, description='the zero is surely within this of it, such as "5 mm"'
    )
    standard_uncertainty: PositiveLength | None = Field(
        None, description='in place of half_width, for a normal prior, such as "1 mm"'
    )


class Glass(Table):
    material: Name = Field(description='what any imbalance is made of, such as "N-BK7"')


class Changer(Table):
    driver: Name = Field(description="the name of a source changer's driver, see: evenarm drivers")
    settings: Settings = Field(default_factory=dict, description="a table of the driver's own keys")


class Climate(Table):
    driver: Name | None = Field(None, description="the name of a climate driver, or leave it out")
    temperature: (
        Annotated[float, _si("temperature", least=273.15, most=373.15, limits="0 to 100 degC")]
        | None
    ) = Field(None, description='such as "20 degC"')
    pressure: (
        Annotated[float, _si("pressure", least=1e4, most=1.4e5, limits="10 kPa to 140 kPa")] | None
    ) = Field(None, description='such as "101.3 kPa"')
    humidity: Annotated[float, _si("ratio", least=0, most=1, limits="0 % to 100 %")] | None = Field(
        None, description='relative humidity, such as "45 %"'
    )
    settings: Settings = Field(default_factory=dict, description="a table of the driver's own keys")


class Records(Table):
    url: Name = Field(
        "sqlite:///logs/journal.sqlite3", description='such as "sqlite:///logs/journal.sqlite3"'
    )


class Simulation(Table):
    world: Name = Field("world.toml", description="the file with the hidden truth")
    seed: int = Field(0, ge=0, lt=2**63, description="a whole number from 0")


TABLES: dict[str, type[Table]] = {
    "bench": Bench,
    "accept": Accept,
    "stage": Stage,
    "detector": Detector,
    "source": Source,
    "expect": Expect,
    "glass": Glass,
    "records": Records,
    "simulation": Simulation,
    "changer": Changer,
    "climate": Climate,
}
REQUIRED = ("bench", "stage", "detector", "source")
