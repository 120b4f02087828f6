"""What a stage file may hold, as pydantic models; the published JSON Schema is generated from them.

Numbers stay texts here: their units depend on the topology, and are read in the next step.
"""

from __future__ import annotations

import datetime
from collections.abc import Iterable
from typing import Annotated, Any, Literal

from pydantic import BeforeValidator, Field, PlainValidator, TypeAdapter, WithJsonSchema, create_model
from pydantic.json_schema import GenerateJsonSchema, JsonSchemaValue
from pydantic_core import core_schema

from deckgen.stage.fields import Format, Name, Number, Section, Text, Title, refused
from deckgen.stage.level1 import GEOMETRY, PARAMETERS, Parameter

_TOLERANCE_TEXT = {"type": "string", "examples": ["3 %", "0.5 dB", "10 mV"]}
_TOLERANCE_SCHEMA: dict[str, Any] = {
    "anyOf": [_TOLERANCE_TEXT, {"type": "array", "items": _TOLERANCE_TEXT, "minItems": 1}]
}


def _tolerance(value: object) -> tuple[str, ...]:
    texts = value if isinstance(value, list) else [value]
    if not texts or not all(isinstance(text, str) for text in texts):
        raise refused('a text with its unit such as "3 %", "0.5 dB" or "10 mV", or a list of them')
    return tuple(texts)


def _claim(value: object) -> object:
    if isinstance(value, str | int | float) and not isinstance(value, bool):
        return {"equals": value}
    if not isinstance(value, dict):
        raise refused('a number, or a table such as { at_least = "20" }')
    return value


Tolerance = Annotated[tuple[str, ...], PlainValidator(_tolerance), WithJsonSchema(_TOLERANCE_SCHEMA)]


class ModelBase(Section):
    """A transistor model of level 1."""

    needed = ("polarity",)

    polarity: Literal["n", "p"] | None = Field(None, description='"n" or "p"')


def _fields(parameters: Iterable[Parameter]) -> dict[str, Any]:
    return {p.name: (Number | None, Field(None, description=p.described)) for p in parameters}


ModelSection = create_model(
    "ModelSection", __base__=ModelBase, __doc__=ModelBase.__doc__, **_fields(PARAMETERS.values())
)


class TransistorBase(Section):
    """A transistor of the topology."""

    needed = ("model", "W", "L")

    model: str | None = Field(None, description="the name of a model in [models]")
    W: Number | None = Field(None, description="channel width [m]")
    L: Number | None = Field(None, description="channel length as drawn [m]")
    M: Number | None = Field(None, description="number of devices in parallel; 1 if absent")
    region: Literal["cut-off", "triode", "saturation"] | None = Field(
        None, description="the region it is meant to work in"
    )
    bulk: Literal["rail", "source"] | None = Field(None, description="where the bulk is tied; rail if absent")


TransistorSection = create_model(
    "TransistorSection", __base__=TransistorBase, __doc__=TransistorBase.__doc__, **_fields(GEOMETRY)
)


class SignalSection(Section):
    """Where the signal enters and leaves; what is absent comes from the topology."""

    input: str | None = Field(None, description="the source that drives the stage")
    output: str | None = Field(None, description="the output node")
    frequency: Number | None = Field(None, description="mid-band frequency [Hz]")
    amplitude: Number | None = Field(None, description="peak EMF of the source [V], or its peak current [A]")
    source_resistance: str | None = Field(
        None, description="the resistor that stands for the signal source; parallel to a current source"
    )
    load: str | None = Field(None, description="the resistor that stands for the load")


class ConditionsSection(Section):
    """Temperatures; 27 °C if absent."""

    temperature: Number | None = Field(None, description="temperature of the stage [°C]")
    tnom: Number | None = Field(None, description="temperature at which the model parameters hold [°C]")


class HandSection(Section):
    """What the hand analysis leaves out."""

    assumptions: Literal["paper", "full"] | None = Field(None, description="the assumption set")
    add: list[str] | None = Field(None, description="single assumptions added to the set")
    drop: list[str] | None = Field(None, description="single assumptions dropped from the set")


class ClaimSection(Section):
    """A number that the designer states: one of the four kinds, with an optional tolerance."""

    equals: Number | None = Field(None, description="the value, within the tolerance")
    at_least: Number | None = Field(None, description="the lowest value that will do")
    at_most: Number | None = Field(None, description="the highest value that will do")
    within: list[Number] | None = Field(
        None, min_length=2, max_length=2, description="the lowest and the highest value that will do"
    )
    tolerance: Tolerance | None = Field(None, description="tolerance of this claim")


class KnownGapSection(Section):
    """A gap that is known and excused, up to a size and a date."""

    needed = ("reason", "limit", "until")

    reason: Text | None = Field(None, description="why the gap is there")
    limit: Tolerance | None = Field(None, description="the largest gap that is excused")
    until: Annotated[datetime.date, Field(strict=True)] | None = Field(
        None, description="the last day on which it is excused"
    )


class RatingSection(Section):
    """Limits of one part, as magnitudes: VDS VGS ID PD of a transistor, P of a resistor, V of a capacitor."""

    VDS: Number | None = Field(None, description="drain-source voltage of a transistor [V]")
    VGS: Number | None = Field(None, description="gate-source voltage of a transistor [V]")
    ID: Number | None = Field(None, description="drain current of a transistor [A]")
    PD: Number | None = Field(None, description="dissipation of a transistor [W]")
    P: Number | None = Field(None, description="dissipation of a resistor [W]")
    V: Number | None = Field(None, description="voltage across a capacitor [V]")


class WantedSection(Section):
    """Which quantities are to be compared; all of them if absent."""

    needed = ("quantities",)

    quantities: list[str] | None = Field(
        None, min_length=1, description="kinds (ID) or single quantities (ID(M1))"
    )


class StatedSection(Section):
    """What is stated of a transistor of a deck; the deck itself says the rest."""

    region: Literal["cut-off", "triode", "saturation"] | None = Field(
        None, description="the region it is meant to work in"
    )


Claim = Annotated[ClaimSection, BeforeValidator(_claim, json_schema_input_type=Number | ClaimSection)]


class StageFile(Section):
    """A stage file of deckgen: one transistor stage, and what its designer expects of it."""

    needed = ("format", "title", "topology", "parts", "models", "transistors")

    format: Format | None = Field(None, description="version of this file format, 1")
    title: Title | None = Field(None, description="a title, one line")
    topology: str | None = Field(None, description="the name of a topology")
    parts: dict[str, Number] | None = Field(None, description="the table of part values")
    models: dict[Name, ModelSection] | None = Field(  # type: ignore[valid-type]
        None, description="the table of models", json_schema_extra={"additionalProperties": False}
    )
    transistors: dict[str, TransistorSection] | None = Field(  # type: ignore[valid-type]
        None, description="the table of transistors"
    )
    signal: SignalSection | None = Field(None, description="where the signal enters and leaves")
    conditions: ConditionsSection | None = Field(None, description="temperatures")
    hand: HandSection | None = Field(None, description="what the hand analysis leaves out")
    tolerance: dict[str, Tolerance] | None = Field(
        None, description="tolerance per kind (gm) or single quantity (gm(M1))"
    )
    claims: dict[str, Claim] | None = Field(None, description="what the designer states, per quantity")
    known_gap: dict[str, KnownGapSection] | None = Field(None, description="excused gaps, per quantity")
    ratings: dict[str, RatingSection] | None = Field(None, description="limits, per part")
    wanted: WantedSection | None = Field(None, description="which quantities are to be compared")


class DeckFile(Section):
    """A stage file of deckgen for a deck that exists: what its designer expects of it."""

    needed = ("format", "deck")

    format: Format | None = Field(None, description="version of this file format, 1")
    title: Title | None = Field(None, description="a title, one line; the deck's own if absent")
    deck: str | None = Field(None, description="the deck, beside this file or below its folder")
    transistors: dict[str, StatedSection] | None = Field(None, description="the table of transistors")
    signal: SignalSection | None = Field(None, description="where the signal enters and leaves")
    hand: HandSection | None = Field(None, description="what the hand analysis leaves out")
    tolerance: dict[str, Tolerance] | None = Field(
        None, description="tolerance per kind (gm) or single quantity (gm(M1))"
    )
    claims: dict[str, Claim] | None = Field(None, description="what the designer states, per quantity")
    known_gap: dict[str, KnownGapSection] | None = Field(None, description="excused gaps, per quantity")
    ratings: dict[str, RatingSection] | None = Field(None, description="limits, per part")
    wanted: WantedSection | None = Field(None, description="which quantities are to be compared")
    polarised: list[str] | None = Field(None, description="capacitors that are polarised")


class StageSchema(GenerateJsonSchema):
    """JSON Schema of our files: TOML has no null, so nothing may be null and no default is.

    Titles made from the keys would only repeat them.
    """

    def field_title_should_be_set(self, schema: object) -> bool:
        """Leave made-up titles out."""
        return False

    def nullable_schema(self, schema: core_schema.NullableSchema) -> JsonSchemaValue:
        """Leave null out."""
        return self.generate_inner(schema["schema"])

    def default_schema(self, schema: core_schema.WithDefaultSchema) -> JsonSchemaValue:
        """Leave the default out: absent is absent."""
        return self.generate_inner(schema["schema"])


def stage_json_schema() -> dict[str, Any]:
    """JSON Schema (draft 2020-12) of a stage file: one of a topology, or one of a deck."""
    either = TypeAdapter(StageFile | DeckFile)
    schema = either.json_schema(schema_generator=StageSchema)
    return {"$schema": StageSchema.schema_dialect, "title": "StageFile", **schema}
