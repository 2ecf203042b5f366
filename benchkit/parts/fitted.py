"""The model of any part's table."""

from __future__ import annotations

from benchkit.files.parts import Bipolar, Diode, Fuse, Mosfet, Part, Tvs, Zener
from benchkit.parts.bipolar_points import BipolarModel, bipolar_model
from benchkit.parts.diode import DiodeModel
from benchkit.parts.diode_points import diode_model
from benchkit.parts.fuse_points import FuseModel, fuse_model
from benchkit.parts.mosfet import MosfetModel, mosfet_model
from benchkit.parts.resistor import ResistorModel, resistor_model
from benchkit.parts.zener import tvs_model, zener_model

# Every model has ``notes``, sentences on what had to be assumed, and ``sample(a, b, c)``: laws
# from three independent standard scores, arrays (samples,), 0 typical and 3 at the sheet's limit,
# on the side that drops, leaks or warms the most.
AnyModel = DiodeModel | MosfetModel | BipolarModel | ResistorModel | FuseModel


def part_model(reference: str, part: Part) -> AnyModel:
    """Fit a part's laws to its sheet.

    Raises InputError naming ``parts.<reference>`` when its points are too few or contradict each
    other.
    """
    if isinstance(part, Diode):
        return diode_model(reference, part)
    if isinstance(part, Zener):
        return zener_model(reference, part)
    if isinstance(part, Tvs):
        return tvs_model(reference, part)
    if isinstance(part, Mosfet):
        return mosfet_model(reference, part)
    if isinstance(part, Bipolar):
        return bipolar_model(reference, part)
    if isinstance(part, Fuse):
        return fuse_model(reference, part)
    return resistor_model(reference, part)
