"""What the bench adds to a trace: places for the scale of the delay stage and the drift of the spots' overlap."""

from __future__ import annotations

from dataclasses import replace

from inverse.description.pumpprobe import INSTRUMENT, PumpProbe
from inverse.description.sample.slots import GIVEN, Slots, slot_of

__all__ = ["instrument_slots"]


def instrument_slots(setup: PumpProbe) -> Slots:
    """Return the places of a bench that are not zero, field -> `Slot`, named without a place."""
    slots = {field: slot_of(field, getattr(setup, field), "", GIVEN, 0.0) for field in INSTRUMENT}
    return {
        field: slot if slot.shared else replace(slot, name=field)
        for field, slot in slots.items()
        if slot.value != 0.0
    }
