"""Findings about the cards of a deck. What they say of ngspice was measured with ngspice 39.3."""

from __future__ import annotations

from deckgen.comparison import Severity
from deckgen.findings.entry import Entry

_R, _W, _N = Severity.REFUSED, Severity.WARNING, Severity.NOTE

_NUMBERS: dict[str, Entry] = {
    "bare-m": Entry(
        _W,
        "{called}: M is milli in a deck, so {written} is {reading}. Write {mega} if mega is meant, {milli} "
        "if milli",
    ),
    "digits-after-suffix": Entry(
        _W, "{called}: ngspice ignores digits behind a suffix, so {written} is {reading}. Write {write}"
    ),
    "greek-mu": Entry(
        _W,
        "{called}: ngspice does not know the Greek letter μ, so {written} is {reading}. Write {write}",
    ),
    "farad-is-femto": Entry(
        _W,
        "{called}: F is femto, not farad, so {written} is {reading} F. Write {farad} for farad, {femto} for "
        "femtofarad",
    ),
    "suffix-unknown": Entry(
        _W,
        "{called}: ngspice ignores {rest}, so {written} is {reading}. Write the number with one of the "
        "suffixes f p n u m k Meg G T, or with an exponent",
    ),
    "number-in-expression": Entry(
        _R, "{called}: ngspice stops at {written} in an expression. Write the number with a decimal point"
    ),
    "decimal-comma": Entry(
        _W,
        "{called}: ngspice takes the comma of {written} for a blank and {effect}. Write {write}",
    ),
    "unit-apart": Entry(
        _R, "{called}: ngspice stops at the blank before the unit of {written}. Write {write}"
    ),
}

_VALUES: dict[str, Entry] = {
    "value-extra": Entry(
        _W,
        "{called} has more than one value, and the last counts: {last}, not {first}. Remove all but one",
    ),
    "value-missing": Entry(_R, "{called} has no value, and ngspice {effect}. Add it"),
    "resistor-zero": Entry(
        _W,
        "{called} is 0 Ω, and ngspice takes 1 mΩ for it in silence. Write the resistance it has, or join "
        "its nodes",
    ),
    "w-or-l-missing": Entry(
        _W,
        "{called} has no {missing}, so ngspice takes 100 µm for it: the drain current is that of another "
        "transistor. Add {missing}",
    ),
    "width-or-length-not-positive": Entry(
        _R,
        "{called} has {name} = {value}: its current runs backwards, or there is none. Write a positive "
        "{name}",
    ),
    "kp-not-positive": Entry(
        _R,
        "{called} has KP = {value}: the drain current runs backwards, or there is none. Write a positive KP",
    ),
    "ld-too-large": Entry(
        _R,
        "{called}: LD = {ld} of model {model} is not below half its length, {half}, so no channel is left "
        "(L - 2·LD) and the current runs backwards or without limit. Correct L or LD",
    ),
    "node-name-reserved": Entry(
        _R, "{called}: no node may be called {node}: {why}. Give the node another name"
    ),
    "node-count": Entry(
        _R,
        "{called} has {found} where {needed} are needed: it is not connected as it was meant, or ngspice "
        "stops. Write all nodes",
    ),
    "instance-parameter-unknown": Entry(
        _R, "{called}: ngspice knows no {parameter} there and stops{hint}. Correct or remove it"
    ),
}

_NAMES: dict[str, Entry] = {
    "model-undefined": Entry(
        _R,
        "{called}: there is no .model {name} here, and ngspice stops{hint}. Add the model, or correct the "
        "name",
    ),
    "model-type": Entry(
        _R,
        "{called}: model {name} is of kind {kind} where {wanted} is needed, and ngspice stops{hint}. Correct "
        "the kind, or name another model",
    ),
    "model-duplicate": Entry(
        _W,
        "a second .model {name}: ngspice takes the first, of {line}, in silence. Remove one, or rename it",
    ),
    "model-parameter-unknown": Entry(
        _R,
        "{called}: a model of kind {kind} has no parameter {parameter}: ngspice would ignore it, and the "
        "model be another than the card says{hint}. Correct or remove it",
    ),
    "subcircuit-undefined": Entry(
        _R,
        "{called}: there is no .subckt {name} here, and ngspice stops{hint}. Add it, or correct the name",
    ),
    "subcircuit-ports": Entry(
        _R,
        "{called} has {found}, but .subckt {name} has {needed}, and ngspice stops. Write all of them, "
        "in its order",
    ),
    "subcircuit-duplicate": Entry(
        _R,
        "a second .subckt {name}: ngspice takes the cards of the first, but may take the parameters of this "
        "one. Remove one, or rename it",
    ),
    "subcircuit-open": Entry(
        _R,
        "this {what}, so it is not certain which cards are inside, and ngspice stops. Add the missing card",
    ),
    "subcircuit-parameter-unknown": Entry(
        _W,
        "{called}: .subckt {name} has no parameter {parameter}, and ngspice ignores it in silence{hint}. "
        "Correct or remove it",
    ),
    "parameter-duplicate": Entry(
        _W, "{called}: {parameter} is set twice, and the last counts in silence: {last}. Remove one"
    ),
    "option-unknown": Entry(
        _W, "ngspice knows no option {option} and ignores it in silence{hint}. Correct or remove it"
    ),
    "element-duplicate": Entry(_R, "a second {called}: ngspice stops. Rename one of them"),
    "names-differ-in-case": Entry(
        _W,
        "{called}: {second} and {first} differ in case only, and for ngspice they are one node. Spell it in "
        "one way, or rename one if two nodes are meant",
    ),
}

_INPUTS: dict[str, Entry] = {
    "ac-source-missing": Entry(
        _W,
        "no source has an AC value and no note names the input: transistors alone are compared, gain and "
        "resistances are not. Add `* deckgen: input NAME`, or AC 1 to the source",
    ),
    "ac-sources-several": Entry(
        _W,
        "several sources have an AC value ({names}), so none is surely the input: transistors alone are "
        "compared. Add `* deckgen: input NAME`",
    ),
    "no-signal-path": Entry(
        _W,
        "input or output of the stage are not known: transistors alone are compared, gain and resistances "
        "are not. Add `* deckgen: input NAME` and `* deckgen: output NODE`",
    ),
    "ac-amplitude": Entry(
        _N,
        "the AC value of {called} is {size}: its V(out) is that many times the gain. deckgen compares the "
        "gain, V(out) for a value of 1",
    ),
}

CARD_ENTRIES: dict[str, Entry] = {**_NUMBERS, **_VALUES, **_NAMES, **_INPUTS}
