"""The effects that a hand analysis can leave out, and what each assumption switches.

An assumption is named by what it leaves out (``no-channel-length-modulation``); an effect by what it
is. Everything downstream works with the set of effects that are *on*.
"""

from __future__ import annotations

from collections.abc import Iterable
from enum import StrEnum


class Effect(StrEnum):
    """Effects that can be switched, by their trade names."""

    CHANNEL_LENGTH_MODULATION = "channel-length modulation"
    OUTPUT_RESISTANCE = "output resistance"
    BODY_EFFECT = "body effect"
    SERIES_RESISTANCE = "series resistance"
    BULK_JUNCTIONS = "bulk junctions"
    COUPLING_IMPEDANCE = "coupling impedance"
    DEVICE_CAPACITANCES = "device capacitances"
    LOAD_CAPACITANCES = "load capacitances"
    EXACT_BANDWIDTH = "exact bandwidth"


EffectSet = frozenset[Effect]

ALL_EFFECTS: EffectSet = frozenset(Effect)

LEFT_OUT_BY: dict[str, Effect] = {
    "no-channel-length-modulation": Effect.CHANNEL_LENGTH_MODULATION,
    "no-output-resistance": Effect.OUTPUT_RESISTANCE,
    "no-body-effect": Effect.BODY_EFFECT,
    "no-series-resistance": Effect.SERIES_RESISTANCE,
    "no-bulk-junctions": Effect.BULK_JUNCTIONS,
    "ideal-coupling": Effect.COUPLING_IMPEDANCE,
    "no-device-capacitances": Effect.DEVICE_CAPACITANCES,
    "no-load-capacitances": Effect.LOAD_CAPACITANCES,
    "time-constant-bandwidth": Effect.EXACT_BANDWIDTH,
}


def effects_under(assumptions: Iterable[str]) -> EffectSet:
    """The effects that stay on under the given assumption slugs. Raises KeyError for an unknown slug."""
    return ALL_EFFECTS - {LEFT_OUT_BY[slug] for slug in assumptions}
