"""Typical rig troubles, as trade facts: which way a trouble moves which value."""

from __future__ import annotations

# (last word of the value's name, direction): what the trade would look for
TROUBLES: dict[tuple[str, int], str] = {
    ("compliance", 1): "trapped gas in a liquid-filled chamber, or a soft hose or diaphragm",
    ("volume", 1): "a larger dead volume: a longer stub, a second fitting, trapped gas in a liquid",
    ("volume", -1): "a chamber partly filled with condensate or dirt",
    ("compliance", -1): "a smaller chamber, or a stiffer diaphragm",
    ("bulk_modulus", -1): "gas dissolved or trapped in the liquid",
    ("bore", -1): "a partly blocked or crushed bore",
    ("bore", 1): "a wider tube than stated",
    ("length", 1): "a longer line than stated, or a narrow place that acts like one",
    ("length", -1): "a shorter line than stated",
    ("resistance", 1): "a partly blocked passage, a bad contact, or a hotter winding",
    ("resistance", -1): "a leak or a shunt beside the resistance",
    ("viscosity", 1): "a colder fluid, or another grade",
    ("viscosity", -1): "a warmer fluid, another grade, or a diluted one",
    ("density", 1): "another fluid, or one with solids",
    ("density", -1): "another fluid, or gas in it",
    ("mass", 1): "added mass: a fixture, a cable, fluid that moves along",
    ("mass", -1): "a part that has come loose",
    ("inertia", 1): "added inertia: a coupling, a load left on the shaft",
    ("inertia", -1): "a coupling that slips, or a part that has come loose",
    ("stiffness", -1): "a cracked or loose spring, or a soft mounting",
    ("stiffness", 1): "a spring that binds or touches its stop",
    ("damping", 1): "rubbing, a tight seal, a colder damper fluid",
    ("damping", -1): "a leaking damper, or a warmer damper fluid",
    ("constant", -1): "a weakened or hot magnet",
    ("capacitance", 1): "cable capacitance in parallel",
    ("capacitance", -1): "an aged capacitor",
    ("inductance", -1): "a saturated core or shorted turns",
    ("temperature", 1): "a warmer fluid than stated",
    ("temperature", -1): "a colder fluid than stated",
    ("wire", -1): "a thinner wire than stated, or corrosion",
    ("turns", 1): "more active turns than stated",
    ("area", -1): "a partly blocked passage or a smaller piston",
    ("capacity", 1): "added heat capacity: a thicker sheath, paste, scale",
}


def trouble(name: str, change: float) -> str:
    """What the trade would look for when a value seems to have moved; "" where nothing is typical."""
    if not change:
        return ""
    return TROUBLES.get((name.rsplit(".", 1)[-1], 1 if change > 0 else -1), "")
