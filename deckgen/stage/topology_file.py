"""What the description of a topology may hold, as pydantic models."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, StrictBool

from deckgen.stage.fields import Format, Number, Section, Text, Title


class SignalFile(Section):
    """Where the signal enters and leaves, unless a stage says otherwise."""

    needed = ("input", "output")

    input: str | None = Field(None, description="the source that drives the stage")
    output: str | None = Field(None, description="the output node")
    source_resistance: str | None = None
    load: str | None = None


class PartFile(Section):
    """One part of the topology."""

    needed = ("unit", "about")

    unit: Literal["V", "A", "Ω", "F", "H"] | None = Field(None, description="one of V, A, Ω, F, H")
    about: Text | None = Field(None, description="what the part is for")
    required: StrictBool | None = None
    needs: list[str] | None = None


class TransistorFile(Section):
    """One transistor of the topology."""

    needed = ("about",)

    about: Text | None = Field(None, description="what the transistor is for")


class StarterFile(Section):
    """Values of a starter stage."""

    needed = ("title", "parts", "transistors", "model")

    title: Title | None = Field(None, description="a title, one line")
    parts: dict[str, Number] | None = Field(None, description="the table of part values")
    transistors: dict[str, dict[str, Number]] | None = Field(None, description="W and L of each transistor")
    model: dict[str, Number] | None = Field(None, description="the parameters of its model")
    signal: dict[str, Number] | None = None


class StartersFile(Section):
    """Starter stages, per polarity."""

    n: StarterFile | None = None
    p: StarterFile | None = None


class TopologyFile(Section):
    """The description that stands beside a template."""

    needed = ("format", "title", "about", "nodes", "signal", "parts", "transistors")

    format: Format | None = Field(None, description="version of this file format, 1")
    title: Title | None = Field(None, description="a title, one line")
    about: Text | None = Field(None, description="one line on what it is for")
    nodes: list[str] | None = Field(None, min_length=1, description="the nodes worth asking the voltage of")
    signal: SignalFile | None = Field(None, description="the table of input and output")
    parts: dict[str, PartFile] | None = Field(None, description="the table of parts")
    transistors: dict[str, TransistorFile] | None = Field(None, description="the table of transistors")
    one_of: list[Annotated[list[str], Field(min_length=1)]] | None = None
    starter: StartersFile | None = None
