"""What a stage is connected to, on both of its ports, and the wiring of a circuit of one's own."""

from __future__ import annotations

from typing import Annotated

from pydantic import Field

from benchkit.files.loading import FileModel

Positive = Annotated[float, Field(gt=0)]


class Source(FileModel):
    """[source]: what feeds the exposed port of a stage that guards a load."""

    resistance_ohm: Positive = 0.05
    current_limit_A: Positive | None = None
    """Of a supply with a current limit; a battery or a stiff rail has none."""


class Battery(FileModel):
    """[battery]: what can be connected to the exposed port, either way round."""

    emf_max_V: Positive | None = None
    """Freshly charged; the stage's highest supply voltage unless given."""
    flat_V: Annotated[float, Field(ge=0)] = 0.1
    resistance_ohm: Positive = 0.02
    capacity_Ah: Positive | None = None


class Equipment(FileModel):
    """[equipment]: what is on the guarded port."""

    set_V: Positive | None = None
    """Its own supply when on; the stage's nominal supply voltage unless given."""
    limit_A: Positive | None = None
    """That supply's current limit; the stage's highest current unless given."""
    off_ohm: Positive = 1000.0
    """Across its terminals while off: bleeder, sense divider, leakage."""
    passive_ohm: Positive | None = None
    """While it draws and holds no voltage of its own; nominal voltage over nominal current unless
    given."""
    hold_V: Positive | None = None
    """What its capacitors or back-up cell hold; the stage's nominal supply voltage unless given."""
    hold_ohm: Positive = 0.05


class NetworkPart(FileModel):
    """One entry of [[network]]: a part, and the node that each of its terminals is wired to."""

    part: str
    anode: str | None = None
    cathode: str | None = None
    drain: str | None = None
    gate: str | None = None
    source: str | None = None
    collector: str | None = None
    base: str | None = None
    emitter: str | None = None
    first: str | None = None
    second: str | None = None

    def nodes(self) -> dict[str, str]:
        """Node by terminal, of the terminals that are given."""
        return {key: value for key, value in self if key != "part" and value is not None}
