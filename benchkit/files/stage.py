"""The stage file: the protection circuit under test, its parts as their datasheets print them,
what is measured of it, and the limits it must meet."""

from __future__ import annotations

from itertools import pairwise
from typing import Annotated, Literal

from pydantic import Field, field_validator, model_validator

from benchkit.files.loading import FileModel
from benchkit.files.parts import Part
from benchkit.files.surroundings import Battery, Equipment, NetworkPart, Source
from benchkit.files.trial_checks import check_trials
from benchkit.files.trials import BatteryTrial, FusedTrial, Reverse, SupplySweep

Positive = Annotated[float, Field(gt=0)]
Celsius = Annotated[float, Field(ge=-80, le=250)]


ScenarioName = Literal[
    "right-way", "reversed-source", "reversed-source-charged", "reversed-battery-off",
    "reversed-battery-on", "back-feed", "flat-battery", "open",
]  # fmt: skip


class Working(FileModel):
    """[stage]: what it is and the conditions it works in."""

    name: Annotated[str, Field(min_length=1, max_length=120)]
    topology: Literal[
        "clamp", "fused-clamp", "series-diode", "pmos-pass", "pmos-pass-zener", "pmos-sensed",
        "nmos-pass", "nmos-pass-zener", "nmos-sensed", "network",
    ]  # fmt: skip
    guards: Literal["load", "supply"] | None = None
    """What it protects: a load from its source, or a supply or charger from its battery; the
    topology's usual one unless given."""
    must_stand: list[ScenarioName] | None = None
    """The scenarios in which every rating must hold; the usual ones for what it guards unless
    given."""
    main: str | None = None
    """Of a network: the part that carries the working current, whose case is measured."""
    supply_min_V: Positive
    supply_nominal_V: Positive
    supply_max_V: Annotated[float, Field(gt=0, le=400)]
    current_nominal_A: Positive
    current_max_A: Annotated[float, Field(gt=0, le=500)]
    ambient_nominal_C: Celsius = 25.0
    ambient_max_C: Celsius

    @model_validator(mode="after")
    def _ordered(self) -> Working:
        if not self.supply_min_V <= self.supply_nominal_V <= self.supply_max_V:
            raise ValueError(
                f"supply_min_V {self.supply_min_V:g}, supply_nominal_V {self.supply_nominal_V:g} "
                f"and supply_max_V {self.supply_max_V:g} must rise in that order"
            )
        if self.current_nominal_A > self.current_max_A:
            raise ValueError(
                f"current_nominal_A {self.current_nominal_A:g} must not be above "
                f"current_max_A {self.current_max_A:g}"
            )
        if self.ambient_nominal_C > self.ambient_max_C:
            raise ValueError(
                f"ambient_nominal_C {self.ambient_nominal_C:g} must not be above "
                f"ambient_max_C {self.ambient_max_C:g}"
            )
        return self


class Heat(FileModel):
    """[heat]: how the part's case warms above ambient on this board."""

    case_to_ambient_K_per_W: Positive
    case_to_ambient_max_K_per_W: Positive
    time_constant_s: Annotated[float, Field(gt=0, le=3600)]

    @model_validator(mode="after")
    def _ordered(self) -> Heat:
        if self.case_to_ambient_max_K_per_W < self.case_to_ambient_K_per_W:
            raise ValueError(
                f"case_to_ambient_max_K_per_W {self.case_to_ambient_max_K_per_W:g} must not be "
                f"below case_to_ambient_K_per_W {self.case_to_ambient_K_per_W:g}"
            )
        return self


class Sweep(FileModel):
    """[sweep]: the forward sweep, driven up and then down through these currents."""

    currents_A: Annotated[list[Positive], Field(min_length=4, max_length=200)]
    repeats: Annotated[int, Field(ge=1, le=100)] = 1

    @field_validator("currents_A")
    @classmethod
    def _rising(cls, values: list[float]) -> list[float]:
        for low, high in pairwise(values):
            if high <= low:
                raise ValueError(f"{high:g} follows {low:g}: the currents must rise")
        return values


class Soak(FileModel):
    """[soak]: case temperature against time at a constant current."""

    current_A: Positive
    longest_s: Annotated[float, Field(ge=30, le=14400)] = 600.0
    known_within_K: Positive = 1.0
    loss_reach: Annotated[float, Field(ge=1, le=10)] = 2.0
    """How many times the measured loss the measured thermal resistance may be carried to before
    the report warns that natural convection changes with rise."""


class DropLimit(FileModel):
    """One line of limits.drop: the most the stage may drop at a current."""

    current_A: Positive
    max_V: Positive


class Limits(FileModel):
    """[limits]: what the built board must meet."""

    drop: list[DropLimit] = Field(default_factory=list)
    case_max_C: Celsius | None = None
    junction_margin_min_K: Annotated[float, Field(ge=0)] | None = None
    leakage_max_A: Positive | None = None
    """Into the exposed port at the full reverse voltage."""
    guarded_reverse_max_V: Positive | None = None
    """How far below zero the guarded port may be, the wrong way round."""
    on_from_max_V: Positive | None = None
    """The supply voltage from which the stage is really on."""
    useful_from_max_V: Positive | None = None
    """The supply voltage from which the drop stays within limits.drop at the supply sweep's
    current."""
    gate_margin_min_V: Annotated[float, Field(ge=0)] | None = None
    """Between the gate-source rating and the gate-source voltage measured, at the highest voltage
    of the supply sweep."""
    fuse_clears_max_s: Positive | None = None
    """From the onset of the full current until the fuse has cleared it."""
    clamp_peak_max_V: Positive | None = None
    """How far below zero the guarded port may be meanwhile."""
    battery_current_max_A: Positive | None = None
    """What a reversed battery, or one that feeds equipment which is off, may drive."""
    rule: Literal["guarded", "simple"] = "guarded"


class StageFile(FileModel):
    """A whole stage file."""

    stage: Working
    parts: Annotated[dict[str, Part], Field(min_length=1)]
    network: list[NetworkPart] = Field(default_factory=list)
    source: Source = Source()
    battery: Battery = Battery()
    equipment: Equipment = Equipment()
    heat: Heat
    sweep: Sweep
    soak: Soak | None = None
    supply_sweep: SupplySweep | None = None
    reverse: Reverse | None = None
    fused_trial: FusedTrial | None = None
    battery_trial: BatteryTrial | None = None
    limits: Limits = Limits()

    @field_validator("parts")
    @classmethod
    def _references(cls, parts: dict[str, Part]) -> dict[str, Part]:
        for name in parts:
            if not (name.isascii() and name.isalnum() and name[0].isalpha() and len(name) <= 12):
                raise ValueError(f"{name!r} must be a reference such as D1 or Q2")
        return parts

    @model_validator(mode="after")
    def _wired(self) -> StageFile:
        free = self.stage.topology == "network"
        if free and not self.network:
            raise ValueError(
                'stage.topology is "network": [[network]] must say what each part is wired to'
            )
        if free and self.stage.main not in self.parts:
            given = "missing" if self.stage.main is None else repr(self.stage.main)
            raise ValueError(
                f"stage.main is {given}: with a network it must be the part that carries the "
                f"working current, one of {', '.join(self.parts)}"
            )
        if free and self.stage.guards is None:
            raise ValueError('stage.guards is missing: with a network it is "load" or "supply"')
        if not free and self.network:
            raise ValueError(
                f'[[network]] is for stage.topology "network"; here it is "{self.stage.topology}": '
                "leave the table out, or change the topology"
            )
        if not free and self.stage.main is not None:
            raise ValueError(
                f'stage.main is {self.stage.main!r}, which is for stage.topology "network" only: '
                f'leave it out, here it is "{self.stage.topology}"'
            )
        return self

    @model_validator(mode="after")
    def _consistent(self) -> StageFile:
        most = self.stage.current_max_A
        if self.sweep.currents_A[-1] > most:
            raise ValueError(
                f"sweep.currents_A ends at {self.sweep.currents_A[-1]:g}: it must not go above "
                f"stage.current_max_A {most:g}"
            )
        if self.soak is not None and self.soak.current_A > most:
            raise ValueError(
                f"soak.current_A is {self.soak.current_A:g}: it must not be above "
                f"stage.current_max_A {most:g}"
            )
        for number, limit in enumerate(self.limits.drop, start=1):
            if limit.max_V >= self.stage.supply_min_V:
                raise ValueError(
                    f"limits.drop[{number}].max_V is {limit.max_V:g}: it must be below "
                    f"stage.supply_min_V {self.stage.supply_min_V:g}; volts, not millivolts"
                )
            if not any(abs(limit.current_A / a - 1) < 1e-6 for a in self.sweep.currents_A):
                raise ValueError(
                    f"limits.drop has a limit at {limit.current_A:g} A, which is not one of "
                    "sweep.currents_A: add it there, so that it is measured"
                )
        if self.limits.case_max_C is not None and self.soak is None:
            raise ValueError("limits.case_max_C needs a [soak] table, or it is never measured")
        check_trials(self)
        if self.limits.junction_margin_min_K is not None and self.soak is None:
            raise ValueError(
                "limits.junction_margin_min_K needs a [soak] table, or it is never measured"
            )
        return self
