"""The bench file: instruments with their declared accuracy, and which of them reads what."""

from __future__ import annotations

import datetime as dt
from typing import Annotated, Literal

from pydantic import Field, field_validator, model_validator

from benchkit.files.guarding import Thresholds
from benchkit.files.loading import FileModel

Positive = Annotated[float, Field(gt=0)]
Percent = Annotated[float, Field(ge=0, le=50)]
PointName = Literal[
    "drop", "exposed_voltage", "guarded_voltage", "exposed_current", "case", "ambient",
    "gate_voltage",
]  # fmt: skip
NEEDED: tuple[PointName, ...] = (
    "drop", "exposed_voltage", "guarded_voltage", "exposed_current", "case", "ambient",
)  # fmt: skip


class VoltageAccuracy(FileModel):
    """Limits of error of one voltage range."""

    range_V: Positive
    reading_percent: Percent = 0.0
    range_percent: Percent = 0.0


class TemperatureAccuracy(FileModel):
    """Limits of error of a thermometer with its sensor."""

    offset_K: Positive
    reading_percent: Percent = 0.0


class Instrument(FileModel):
    """One instrument."""

    kind: Literal["supply", "meter", "thermometer", "load", "switch"]
    resource: Annotated[str, Field(min_length=1)]
    """A VISA resource name, or "simulated" for an instrument of the simulated bench."""
    dialect: Annotated[str, Field(min_length=1)]
    """A shipped dialect's name, or the path of a dialect file relative to the bench file."""
    identity: Annotated[str, Field(min_length=3)]
    """How its answer to *IDN? must begin: maker and model."""
    channel: str | None = None
    calibration_due: dt.date
    stands_for: Literal["battery"] | None = None
    """Of a second supply: it stands in for a battery at the exposed port."""
    bleeder_ohm: Annotated[float, Field(ge=10, le=10e3)] | None = None
    """Of that one: the resistor across its terminals, which takes up the current that a supply
    cannot sink."""
    voltage: list[VoltageAccuracy] = Field(default_factory=list)
    temperature: TemperatureAccuracy | None = None

    @field_validator("resource")
    @classmethod
    def _spelled(cls, resource: str) -> str:
        if resource != "simulated" and "::" not in resource:
            raise ValueError(
                f"{resource!r} must be a VISA resource such as TCPIP::192.0.2.10::5025::SOCKET"
            )
        return resource

    @model_validator(mode="after")
    def _battery(self) -> Instrument:
        if self.stands_for is not None and self.kind != "supply":
            raise ValueError(f"stands_for is for a supply, not for a {self.kind}")
        if (self.stands_for is None) != (self.bleeder_ohm is None):
            raise ValueError(
                "stands_for and bleeder_ohm belong together: a supply that stands for a battery "
                "cannot sink, so it needs a resistor across its terminals"
            )
        return self

    @model_validator(mode="after")
    def _accuracy(self) -> Instrument:
        if self.kind == "meter" and not self.voltage:
            raise ValueError("a meter needs its accuracy: voltage = [{ range_V = ..., ... }]")
        if self.kind == "thermometer" and self.temperature is None:
            raise ValueError("a thermometer needs its accuracy: temperature = { offset_K = ... }")
        return self


class Point(FileModel):
    """One quantity the bench can read, and the way to it."""

    instrument: str
    route: str | None = None
    """The channel of a scanning instrument."""
    aperture_nplc: Annotated[float, Field(gt=0, le=100)] = 1.0
    shunt_ohm: Positive | None = None
    shunt_tolerance_percent: Percent = 0.0
    lead_ohm: Annotated[float, Field(ge=0)] = 0.0
    """Resistance inside the Kelvin taps that is the fixture's, not the stage's: subtracted."""
    lead_tolerance_ohm: Annotated[float, Field(ge=0)] = 0.0
    thermoelectric_V_per_K: Annotated[float, Field(ge=0)] = 0.0
    """Limit of what warm junctions of unlike metals add, by the rise of the case over ambient:
    a zero reading, taken cold, cannot remove it."""


class BenchLimits(FileModel):
    """[bench]: the bench as a whole, with limits of its own that no stage may pass."""

    name: Annotated[str, Field(min_length=1, max_length=120)]
    line_frequency_Hz: Literal[50, 60] = 50
    visa: Annotated[str, Field(min_length=1)] = "@py"
    """What pyvisa calls the VISA library: "@py", "@ivi", or the absolute path of an installed one;
    of a real bench only."""
    voltage_max_V: Annotated[float, Field(gt=0, le=60)]
    """At most 60 V: above that, DC is hazardous to touch and needs another kind of bench."""
    current_max_A: Positive
    power_max_W: Positive
    case_max_C: Annotated[float, Field(gt=30, le=200)] = 110.0
    settle_s: Annotated[float, Field(gt=0, le=60)] = 0.05
    """Wait after each change of current before a reading is used."""
    poll_s: Annotated[float, Field(gt=0, le=10)] = 1.0
    """The longest the guard goes without looking while something is energised."""
    bleeder_ohm: Annotated[float, Field(ge=100, le=100e3)] | None = None
    """A resistor put across the guarded port for the trial in reverse: with nothing drawn there, a
    part that leaks and one that blocks take the port to the same voltage."""


class Wiring(FileModel):
    """[wiring]: what the bench does by itself, where it has a switch unit."""

    instrument: str
    loop: str | None = None
    """The digital input that is high while the interlock loop is closed."""
    straight: str | None = None
    """The route that closes the polarity relay the right way round."""
    crossed: str | None = None
    """The route that closes it the wrong way round."""
    bleeder: str | None = None
    """The route that puts bench.bleeder_ohm across the guarded port."""

    @model_validator(mode="after")
    def _complete(self) -> Wiring:
        if (self.straight is None) != (self.crossed is None):
            raise ValueError("straight and crossed belong together: they are the polarity relay")
        routes = [r for r in (self.straight, self.crossed, self.bleeder) if r is not None]
        if len(set(routes)) < len(routes):
            raise ValueError("straight, crossed and bleeder must be different routes")
        if not routes and self.loop is None:
            raise ValueError("it names neither a loop nor a relay: leave the table out")
        return self


class Simulated(FileModel):
    """[simulated]: the invented world behind resources called "simulated"."""

    seed: Annotated[int, Field(ge=0)] = 1
    stage: str | None = None
    """The stage in the fixture when `benchkit simulate` serves this bench."""
    serial: str = "SIM-1"
    ambient_C: Annotated[float, Field(ge=-40, le=80)] = 24.0
    boards: dict[str, list[str]] = Field(default_factory=dict)
    """Faults by serial, spelled name or name=value, e.g. "gate-open", "rds-on-scale=1.3"."""
    faults: list[str] = Field(default_factory=list)
    """Faults of bench and link, spelled name@seconds or name=value@seconds."""


class BenchFile(FileModel):
    """A whole bench file."""

    bench: BenchLimits
    instruments: dict[str, Instrument]
    points: dict[PointName, Point]
    wiring: Wiring | None = None
    guard: Thresholds = Thresholds()
    simulated: Simulated | None = None

    @field_validator("instruments")
    @classmethod
    def _complete(cls, instruments: dict[str, Instrument]) -> dict[str, Instrument]:
        for kind in ("supply", "load", "meter", "thermometer", "switch"):
            found = [
                name for name, item in instruments.items()
                if item.kind == kind and item.stands_for is None
            ]  # fmt: skip
            if not found and kind != "switch":
                raise ValueError(f"none is of kind {kind!r}: the bench needs one")
            if kind in ("supply", "load", "switch") and len(found) > 1:
                beside = ', or say of one of them stands_for = "battery"'
                raise ValueError(
                    f"{' and '.join(found)} are both of kind {kind!r}: give one"
                    + (beside if kind == "supply" else "")
                )
        batteries = [name for name, item in instruments.items() if item.stands_for is not None]
        if len(batteries) > 1:
            raise ValueError(f"{' and '.join(batteries)} both stand for the battery: give one")
        return instruments

    @model_validator(mode="after")
    def _wired(self) -> BenchFile:
        mistakes = [f"points.{name} is missing" for name in NEEDED if name not in self.points]
        for name, point in self.points.items():
            instrument = self.instruments.get(point.instrument)
            kind = "thermometer" if name in ("case", "ambient") else "meter"
            if instrument is None:
                mistakes.append(
                    f"points.{name}.instrument is {point.instrument!r}, it must be one of "
                    f"{', '.join(sorted(self.instruments))}"
                )
            elif instrument.kind != kind:
                mistakes.append(
                    f"points.{name}.instrument is {point.instrument!r}, a {instrument.kind}: "
                    f"it must be a {kind}"
                )
            if (name == "exposed_current") != (point.shunt_ohm is not None):
                mistakes.append(
                    f"points.{name}.shunt_ohm is "
                    + ("missing: current is read across a shunt" if point.shunt_ohm is None
                       else "for exposed_current only")
                )  # fmt: skip
        if self.wiring is not None:
            switch = self.instruments.get(self.wiring.instrument)
            if switch is None or switch.kind != "switch":
                mistakes.append(
                    f"wiring.instrument is {self.wiring.instrument!r}: it must be an instrument of "
                    'kind "switch"'
                )
            if self.wiring.bleeder is not None and self.bench.bleeder_ohm is None:
                mistakes.append("wiring.bleeder needs bench.bleeder_ohm: the resistor it connects")
        if self.simulated is not None and self.bench.visa != "@py":
            mistakes.append(
                f'bench.visa is {self.bench.visa!r}: the simulated bench is spoken to by "@py", '
                "so leave it out here"
            )
        invented = [name for name, i in self.instruments.items() if i.resource == "simulated"]
        if invented and self.simulated is None:
            mistakes.append('a resource is "simulated", so a [simulated] table is needed')
        if invented and len(invented) < len(self.instruments):
            mistakes.append(
                f'only {", ".join(invented)} has the resource "simulated": a bench is simulated '
                "as a whole or not at all"
            )
        if mistakes:
            raise ValueError("; ".join(mistakes))
        return self

    @property
    def is_simulated(self) -> bool:
        """Whether its instruments are those of the simulated bench."""
        return all(item.resource == "simulated" for item in self.instruments.values())

    def only(self, kind: str) -> tuple[str, Instrument]:
        """The name and the table of the one instrument of a kind there is one of; the supply is
        the one that stands for nothing else."""
        return next(
            (name, item) for name, item in self.instruments.items()
            if item.kind == kind and item.stands_for is None
        )  # fmt: skip

    @property
    def battery(self) -> tuple[str, Instrument] | None:
        """The name and the table of the supply that stands for a battery, where there is one."""
        return next(
            ((name, item) for name, item in self.instruments.items() if item.stands_for), None
        )
