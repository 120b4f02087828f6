"""Every kind of fault in a stage file, one at a time: key, found, expected, nearest spelling."""

from __future__ import annotations

from pathlib import Path

import pytest

from deckgen.errors import Fault, InputError
from deckgen.stage.level1 import ELSEWHERE, NOT_TAKEN, PARAMETERS
from deckgen.stage.read import stage_from_text

DATA = Path(__file__).parent / "data"
STAGE = (DATA / "stages" / "amp.toml").read_text(encoding="utf-8")

# What is replaced in the stage by what, then the fault: key path, found, part of expected, nearest.
Case = tuple[tuple[str, str], str, str, str, str | None]

FAULTS: dict[str, Case] = {
    # keys and shapes
    "no format": (
        ("format = 1\n", ""),
        "format", "nothing", "version of this file format, 1", None,
    ),
    "later format": (
        ("format = 1", "format = 2"),
        "format", "2", "1, the version of the file format", None,
    ),
    "format as text": (
        ("format = 1", 'format = "1"'),
        "format", '"1"', "1, the version", None,
    ),
    "format as bool": (
        ("format = 1", "format = true"),
        "format", "true", "1, the version", None,
    ),
    "no title": (
        ('title = "Sensor preamplifier"\n', ""),
        "title", "nothing", "a title, one line", None,
    ),
    "empty title": (
        ('"Sensor preamplifier"', '" "'),
        "title", '" "', "a text", None,
    ),
    "title with a line break": (
        ('"Sensor preamplifier"', '"a\\n.shell ls"'),
        "title", '"a\\u000a.shell ls"', "one line of text", None,
    ),
    "title that turns the writing": (
        ('"Sensor preamplifier"', '"a\\u202Eb"'),
        "title", '"a\\u202eb"', "without control characters", None,
    ),
    "long title": (
        ("Sensor preamplifier", "x" * 161),
        "title", '"' + "x" * 63 + '…"', "at most 160 characters", None,
    ),
    "title as number": (
        ('"Sensor preamplifier"', "5"),
        "title", "5", "a text", None,
    ),
    "unknown section": (
        ("[conditions]", "[condition]"),
        "condition", '"condition"', "one of format, title, topology", "conditions",
    ),
    "unknown key": (
        ('frequency = "10 kHz"', 'frequenzy = "10 kHz"'),
        "signal.frequenzy", '"frequenzy"', "one of input, output, frequency", "frequency",
    ),
    "key in the wrong case": (
        ("temperature = ", "Temperature = "),
        "conditions.Temperature", '"Temperature"', "one of temperature, tnom", "temperature",
    ),
    "text for a table": (
        ('[signal]\nfrequency = "10 kHz"\namplitude = "10 mV"', "[signal.frequency]"),
        "signal.frequency", "a table", 'a number such as "4.7k" or 4700', None,
    ),
    "bool for a number": (
        ("RS = 2000", "RS = true"),
        "parts.RS", "true", "a number", None,
    ),
    "date for a number": (
        ("RS = 2000", "RS = 2027-01-01"),
        "parts.RS", "2027-01-01", "a number", None,
    ),
    "list for a number": (
        ("RS = 2000", "RS = [1]"),
        "parts.RS", "a list", "a number", None,
    ),
    # topology
    "unknown topology": (
        ('"one-device"', '"one-devise"'),
        "topology", '"one-devise"', "one of one-device, pair", "one-device",
    ),
    "topology as a path": (
        ('"one-device"', '"../one-device"'),
        "topology", '"../one-device"', "one of one-device, pair", "one-device",
    ),
    # parts
    "part the topology lacks": (
        ('RL = "47 kΩ"', 'RLOAD = "47 kΩ"'),
        "parts.RLOAD", '"RLOAD"', "one of VDD, RSIG, RD", None,
    ),
    "part in the wrong case": (
        ('RD = "4k7"', 'rd = "4k7"'),
        "parts.rd", '"rd"', "one of VDD, RSIG, RD", "RD",
    ),
    "part twice in different case": (
        ('RD = "4k7"', 'RD = "4k7"\nrd = "4k7"'),
        "parts.rd", 'both "RD" and "rd"', "RD once", None,
    ),
    "required part missing": (
        ('RD = "4k7"\n', ""),
        "parts.RD", "nothing", "a value in Ω (drain resistor)", None,
    ),
    "part without what it needs": (
        ("RS = 2000\n", ""),
        "parts.CS", "CS without RS", "both of CS and RS, or neither (bypass", None,
    ),
    "bare M": (
        ('RD = "4k7"', 'RD = "1M"'),
        "parts.RD", '"1M"', '"1Meg" or "1m"', None,
    ),
    "bare M in a code": (
        ('RD = "4k7"', 'RD = "1M5"'),
        "parts.RD", '"1M5"', '"1.5Meg" or "1.5m"', None,
    ),
    "wrong unit": (
        ('RD = "4k7"', 'RD = "10 nF"'),
        "parts.RD", '"10 nF"', "a value in Ω", None,
    ),
    "unit in the wrong case": (
        ('"10 µF"', '"10 uf"'),
        "parts.CS", '"10 uf"', "a value in F", '"10uF"',
    ),
    "decimal comma": (
        ('"4k7"', '"4,7k"'),
        "parts.RD", '"4,7k"', "a decimal point", '"4.7k"',
    ),
    "garbage": (
        ('"4k7"', '"about 5k"'),
        "parts.RD", '"about 5k"', "a value in Ω", None,
    ),
    "empty number": (
        ('"4k7"', '""'),
        "parts.RD", "an empty text", "a value in Ω", None,
    ),
    "nan": (
        ("RS = 2000", "RS = nan"),
        "parts.RS", "nan", "a value in Ω, finite", None,
    ),
    "infinity": (
        ("RS = 2000", 'RS = "inf"'),
        "parts.RS", '"inf"', "a finite number", None,
    ),
    "resistor of zero": (
        ("RS = 2000", "RS = 0"),
        "parts.RS", "0", "a value above zero", None,
    ),
    "negative capacitor": (
        ('"10 µF"', '"-10 µF"'),
        "parts.CS", '"-10 µF"', "a value above zero", None,
    ),
    "inductor of zero": (
        ("RS = 2000", "RS = 2000\nLD1 = 0.0"),
        "parts.LD1", "0.0", "a value above zero", None,
    ),
    "supply of zero": (
        ('"12 V"', '"0 V"'),
        "parts.VDD", '"0 V"', "a supply other than zero", None,
    ),
    "current source of zero": (
        ("RS = 2000", 'RS = 2000\nIB = "0 mA"'),
        "parts.IB", '"0 mA"', "a supply other than zero", None,
    ),
    # models
    "no polarity": (
        ('polarity = "n"\n', ""),
        "models.NA.polarity", "nothing", '"n" or "p"', None,
    ),
    "polarity in words": (
        ('polarity = "n"', 'polarity = "N"'),
        "models.NA.polarity", '"N"', '"n" or "p"', "n",
    ),
    "unknown parameter": (
        ('LAMBDA = "20m"', 'LAMDA = "20m"'),
        "models.NA.LAMDA", '"LAMDA"', "one of polarity, VTO, KP", "LAMBDA",
    ),
    "parameter in lower case": (
        ('KP = "120u"', 'kp = "120u"'),
        "models.NA.kp", '"kp"', "one of polarity", "KP",
    ),
    "parameter not taken yet": (
        ('LAMBDA = "20m"', 'KF = "20"'),
        "models.NA.KF", '"KF"', "the hand analysis does not take KF yet", None,
    ),
    "level": (
        ("LAMBDA = ", "LEVEL = 1\nLAMBDA = "),
        "models.NA.LEVEL", '"LEVEL"', "no LEVEL", None,
    ),
    "tnom in a model": (
        ("LAMBDA = ", "tnom = 27\nLAMBDA = "),
        "models.NA.tnom", '"tnom"', "in [conditions]", None,
    ),
    "KP of zero": (
        ('KP = "120u"', "KP = 0"),
        "models.NA.KP", "0", "a value above zero", None,
    ),
    "KP in the wrong unit": (
        ('KP = "120u"', 'KP = "120 µA"'),
        "models.NA.KP", '"120 µA"', "a value in A/V²", None,
    ),
    "negative lambda": (
        ('"20m"', '"-20m"'),
        "models.NA.LAMBDA", '"-20m"', "zero or above", None,
    ),
    "PHI of zero": (
        ('LD = "0.1u"', "PHI = 0"),
        "models.NA.PHI", "0", "a value above zero", None,
    ),
    "TOX without its prefix": (
        ('TOX = "20n"', "TOX = 20"),
        "models.NA.TOX", "20", "a value in m below 1e-05", None,
    ),
    "a doping that is none": (
        ('LAMBDA = "20m"', "NSUB = 1e10"),
        "models.NA.NSUB", "10000000000.0", "a value in 1/cm³ above 1.45e+10", None,
    ),
    "a doping per cubic metre": (
        ('LAMBDA = "20m"', 'NSUB = "1e21 1/m³"'),
        "models.NA.NSUB", '"1e21 1/m³"', "a value in 1/cm³", None,
    ),
    "a gate of two kinds": (
        ('LAMBDA = "20m"', "TPG = 2"),
        "models.NA.TPG", "2", "one of -1, 0, 1", None,
    ),
    "a grading of one": (
        ('LAMBDA = "20m"', "MJ = 1"),
        "models.NA.MJ", "1", "a value below 1", None,
    ),
    "a resistance of zero in a card": (
        ('LAMBDA = "20m"', "RS = 0"),
        "models.NA.RS", "0", "a value above zero", None,
    ),
    "an area with a prefix before its unit": (
        ("M = 2", 'AD = "40 pm²"'),
        "transistors.M1.AD", '"40 pm²"', "a value in m²", None,
    ),
    "no squares": (
        ("M = 2", "NRD = 0"),
        "transistors.M1.NRD", "0", "a value above zero", None,
    ),
    "model name with a blank": (
        ("[models.NA]", '[models."N A"]'),
        'models."N A"', '"N A"', "a name of letters, digits and _", None,
    ),
    "model name with a card in it": (
        ("[models.NA]", '[models."N\\n.end"]'),
        'models."N\\u000a.end"', '"N\\u000a.end"', "a name of letters", None,
    ),
    "models that differ in case": (
        ("[transistors.M1]", '[models.na]\npolarity = "n"\n[transistors.M1]'),
        "models.na", "both NA and na", "names that differ in more than case", None,
    ),
    # transistors
    "transistor in lower case": (
        ("[transistors.M1]", "[transistors.m1]"),
        "transistors.m1", '"m1"', "M1", "M1",
    ),
    "no model named": (
        ('model = "NA"\n', ""),
        "transistors.M1.model", "nothing", "the name of a model in [models]", None,
    ),
    "model that does not exist": (
        ('model = "NA"', 'model = "NAA"'),
        "transistors.M1.model", '"NAA"', "NA", "NA",
    ),
    "no width": (
        ('W = "100u"\n', ""),
        "transistors.M1.W", "nothing", "channel width [m]", None,
    ),
    "width of zero": (
        ('W = "100u"', "W = 0"),
        "transistors.M1.W", "0", "a value above zero", None,
    ),
    "width without its prefix": (
        ('W = "100u"', "W = 100"),
        "transistors.M1.W", "100", "a length in metre below 10", '"100u"',
    ),
    "length in a lone m": (
        ('L = "2 µm"', 'L = "2m"'),
        "transistors.M1.L", '"2m"', "a lone m is metre or milli", None,
    ),
    "length eaten up by diffusion": (
        ('L = "2 µm"', 'L = "0.2u"'),
        "transistors.M1.L", '"0.2u"', "more than 2·LD of model NA, 2e-07 m", None,
    ),
    "half a device": (
        ("M = 2", "M = 1.5"),
        "transistors.M1.M", "1.5", "a whole number of devices", None,
    ),
    "no device": (
        ("M = 2", "M = 0"),
        "transistors.M1.M", "0", "a whole number of devices, 1 or more", None,
    ),
    "unknown region": (
        ('"saturation"', '"saturated"'),
        "transistors.M1.region", '"saturated"', '"cut-off" or "triode"', "saturation",
    ),
    "unknown bulk": (
        ('bulk = "source"', 'bulk = "gate"'),
        "transistors.M1.bulk", '"gate"', '"rail" or "source"', None,
    ),
    # signal and conditions
    "input that is no source": (
        ("[signal]", '[signal]\ninput = "RD"'),
        "signal.input", '"RD"', "one of VSIG, VDD, IB", None,
    ),
    "output that is no node": (
        ("[signal]", '[signal]\noutput = "OUT"'),
        "signal.output", '"OUT"', "one of vdd, g, d, out", "out",
    ),
    "load that the stage lacks": (
        ("[signal]", '[signal]\nload = "LD1"'),
        "signal.load", '"LD1"', "a resistor of this stage: one of RSIG", None,
    ),
    "load that is the source resistance": (
        ("[signal]", '[signal]\nload = "RSIG"'),
        "signal.load", '"RSIG"', "another resistor", None,
    ),
    "frequency of zero": (
        ('"10 kHz"', "0"),
        "signal.frequency", "0", "a value above zero", None,
    ),
    "frequency in volt": (
        ('"10 kHz"', '"10 V"'),
        "signal.frequency", '"10 V"', "a value in Hz", None,
    ),
    "amplitude in megavolt": (
        ('"10 mV"\n\n[cond', '"10 MV"\n\n[cond'),
        "signal.amplitude", '"10 MV"', '"10mV"', None,
    ),
    "temperature in kelvin": (
        ("temperature = 85", "temperature = 298.15"),
        "conditions.temperature", "298.15", "a temperature from -200 to 250 °C", None,
    ),
    "temperature below absolute zero": (
        ('"25 °C"', '"-300 °C"'),
        "conditions.tnom", '"-300 °C"', "a temperature from -200", None,
    ),
    # hand
    "unknown set": (
        ('"full"', '"ful"'),
        "hand.assumptions", '"ful"', '"paper" or "full"', "full",
    ),
    "unknown assumption": (
        ('"no-body-effect"', '"no-bodyeffect"'),
        "hand.add", '"no-bodyeffect"', "one of no-channel-length-modulation", "no-body-effect",
    ),
    "assumption added and dropped": (
        ("drop = []", 'drop = ["no-body-effect"]'),
        "hand.drop", '"no-body-effect" in add as well', "one of them", None,
    ),
    "assumption as a text": (
        ("drop = []", 'drop = "ideal-coupling"'),
        "hand.drop", '"ideal-coupling"', "a list", None,
    ),
    "assumption as a number": (
        ("drop = []", "drop = [5]"),
        "hand.drop", "5", "a text", None,
    ),
    # tolerance
    "tolerance of nothing known": (
        ('gm = "3%"', 'Gm = "3%"'),
        "tolerance.Gm", '"Gm"', "a quantity such as ID(M1)", "gm(M1)",
    ),
    "tolerance without a unit": (
        ('gm = "3%"', 'gm = "0.03"'),
        "tolerance.gm", '"0.03" without a unit', '"3 %" or a value with its unit, S', None,
    ),
    "tolerance as a number": (
        ('gm = "3%"', "gm = 0.03"),
        "tolerance.gm", "0.03", "a text with its unit", None,
    ),
    "tolerance in the wrong unit": (
        ('gm = "3%"', 'gm = "3 mV"'),
        "tolerance.gm", '"3 mV"', "a value in S", None,
    ),
    "tolerance of zero": (
        ('gm = "3%"', 'gm = "0 %"'),
        "tolerance.gm", '"0 %"', "a value above zero", None,
    ),
    "dB where there is no ratio": (
        ('gm = "3%"', 'gm = "1 dB"'),
        "tolerance.gm", '"1 dB"', '"3 %" or a value with its unit, S', None,
    ),
    "dB beside a percentage": (
        ('"0.1 V/V"', '"5 %"'),
        "tolerance.Av", '"5 %" as well', "one of a percentage and dB", None,
    ),
    "percentage of an angle": (
        ('"2 deg"', '"2 %"'),
        'tolerance."Av.phase"', '"2 %"', 'such as "5 deg"', None,
    ),
    "tolerance twice": (
        ('gm = "3%"', '"VGS(m1)" = "3%"'),
        'tolerance."VGS(M1)"', "VGS(M1) twice", "each quantity once", None,
    ),
    # claims
    "claim on an unknown kind": (
        ("Rin = {", "Zin = {"),
        "claims.Zin", '"Zin"', "a quantity such as ID(M1), V(out) or Av", "Rin",
    ),
    "claim on a kind alone": (
        ('"ID(M1)" = "0.5', 'ID = "0.5'),
        "claims.ID", '"ID"', "a quantity such as", "ID(M1)",
    ),
    "claim on a stage quantity of a device": (
        ("Rin = {", '"Rin(M1)" = {'),
        'claims."Rin(M1)"', '"Rin(M1)"', "a quantity such as", "Rin",
    ),
    "claim on an unknown transistor": (
        ('"ID(M1)" = "0.5', '"ID(M11)" = "0.5'),
        'claims."ID(M11)"', '"ID(M11)"', "a transistor of the topology: M1", "ID(M1)",
    ),
    "claim on an unknown node": (
        ('"V(out)" =', '"V(oot)" ='),
        'claims."V(oot)"', '"V(oot)"', "a node of the topology: one of vdd", "V(out)",
    ),
    "claim in the wrong unit": (
        ('"0.5 mA"', '"0.5 mV"'),
        'claims."ID(M1)".equals', '"0.5 mV"', "a value in A", None,
    ),
    "claim with an unknown word": (
        ("at_least = ", "at_lest = "),
        "claims.Rin.at_lest", '"at_lest"', "one of equals, at_least", "at_least",
    ),
    "claim of two kinds": (
        ('{ at_least = "100k" }', '{ at_least = "100k", at_most = "1Meg" }'),
        "claims.Rin", "at_least and at_most", "within = [low, high] gives both", None,
    ),
    "claim of nothing": (
        ('{ at_least = "100k" }', "{}"),
        "claims.Rin", "no value", "one of equals, at_least", None,
    ),
    "claim as a list": (
        ('{ at_least = "100k" }', "[1, 2]"),
        "claims.Rin", "a list", "a number, or a table", None,
    ),
    "range the wrong way round": (
        ('[-20, "-10"]', '["-10", -20]'),
        "claims.Av.within", '"-10" before -20', "the lower value first", None,
    ),
    "range of one value": (
        ('[-20, "-10"]', "[-20]"),
        "claims.Av.within", "a list", "at least", None,
    ),
    "tolerance of a claim in the wrong unit": (
        ('tolerance = "1 dB"', 'tolerance = "1 mV"'),
        "claims.Av.tolerance", '"1 mV"', "a value in V/V", None,
    ),
    # known gaps
    "known gap without a reason": (
        ("reason = \"the card's RS is left out\"\n", ""),
        "known_gap.Av.reason", "nothing", "why the gap is there", None,
    ),
    "known gap without an end": (
        ("until = 2027-06-30\n", ""),
        "known_gap.Av.until", "nothing", "the last day", None,
    ),
    "known gap until a text": (
        ("until = 2027-06-30", 'until = "2027-06-30"'),
        "known_gap.Av.until", '"2027-06-30"', "a date such as", None,
    ),
    "known gap of an unknown quantity": (
        ("[known_gap.Av]", "[known_gap.AV]"),
        "known_gap.AV", '"AV"', "a quantity such as", "Av",
    ),
    # ratings
    "rating of an absent part": (
        ("[ratings.CS]", "[ratings.CX]"),
        "ratings.CX", '"CX"', "one of M1, RSIG, RD, RS, CS, RL", None,
    ),
    "rating of a supply": (
        ("[ratings.CS]", "[ratings.VDD]"),
        "ratings.VDD", '"VDD"', "one of M1, RSIG", None,
    ),
    "rating that a resistor has not": (
        ('P = "250 mW"', 'V = "200 V"'),
        "ratings.RD.V", '"V"', "P", None,
    ),
    "rating that a transistor has not": (
        ('ID = "200 mA"', 'P = "1 W"'),
        "ratings.M1.P", '"P"', "VDS, VGS, ID", "PD",
    ),
    "rating in the wrong unit": (
        ('"250 mW"', '"250 mV"'),
        "ratings.RD.P", '"250 mV"', "a value in W", None,
    ),
    "negative rating": (
        ('"60 V"', '"-60 V"'),
        "ratings.M1.VDS", '"-60 V"', "a value above zero", None,
    ),
    # wanted
    "unknown quantity wanted": (
        ('"gm(m1)"', '"gn(M1)"'),
        "wanted.quantities", '"gn(M1)"', "V(out) or Av; kinds: ID, VGS", None,
    ),
    "nothing wanted": (
        ('["ID", "gm(m1)", "Av"]', "[]"),
        "wanted.quantities", "a list", "at least one entry", None,
    ),
    "quantity wanted twice": (
        ('"gm(m1)"', '"gm(m1)", "gm(M1)"'),
        "wanted.quantities", "gm(M1) twice", "each quantity once", None,
    ),
}  # fmt: skip


def faults_of(edit: tuple[str, str]) -> list[Fault]:
    """The faults of the stage with one piece of its text replaced, which stands in it once."""
    assert STAGE.count(edit[0]) == 1
    with pytest.raises(InputError) as caught:
        stage_from_text(STAGE.replace(*edit), file="amp.toml", templates=DATA / "templates")
    return list(caught.value.faults)


def test_there_are_fifty_kinds_of_fault_and_more() -> None:
    assert len(FAULTS) >= 50


@pytest.mark.parametrize("name", FAULTS)
def test_a_fault_says_file_key_found_expected_and_nearest(name: str) -> None:
    edit, where, found, expected, close = FAULTS[name]
    faults = faults_of(edit)
    assert len(faults) == 1, [str(fault) for fault in faults]
    (fault,) = faults
    assert fault.file == "amp.toml"
    assert fault.where == where
    assert fault.found == found
    assert expected in fault.expected
    assert fault.nearest == close
    assert "\n" not in str(fault)


@pytest.mark.parametrize("name", sorted(NOT_TAKEN))
def test_every_other_parameter_of_the_card_has_its_own_message(name: str) -> None:
    assert name not in PARAMETERS
    (fault,) = faults_of(('LAMBDA = "20m"', f"{name.lower()} = 1"))
    assert fault.where == f"models.NA.{name.lower()}"
    assert f"does not take {name} yet" in fault.expected
    assert name not in ELSEWHERE
