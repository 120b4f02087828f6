"""Names that ngspice knows: parameters of devices and models, kinds of models, options, source words.

Taken from what ngspice 39.3 itself lists (its command ``devhelp``) and accepts; a test asks it again.
"""

from __future__ import annotations

LEVEL1_MODEL = frozenset(
    "vto vt0 kp gamma phi lambda rd rs cbd cbs is pb cgso cgdo cgbo rsh cj mj cjsw mjsw js tox ld u0 uo fc "
    "nmos pmos nsub tpg nss tnom kf af".split()
)
LEVEL1_INSTANCE = frozenset(
    "m l w ad as pd ps nrd nrs off icvds icvgs icvbs temp dtemp ic sens_l sens_w".split()
)
RESISTOR_MODEL = frozenset(
    "rsh narrow dw short dlr tc1 tc1r tc2 tc2r tce defw w l kf af tnom r res bv_max lf wf ef".split()
)
RESISTOR_INSTANCE = frozenset(
    "resistance r ac temp dtemp l w m tc tc1 tc2 tce bv_max scale noisy noise sens_resist".split()
)
CAPACITOR_MODEL = frozenset(
    "cap cj cox cjsw capsw defw w defl l narrow short del tc1 tc2 tnom di thick bv_max c".split()
)
CAPACITOR_INSTANCE = frozenset("capacitance cap c ic temp dtemp w l m tc1 tc2 bv_max scale sens_cap".split())
INDUCTOR_MODEL = frozenset("ind tc1 tc2 tnom csect dia length nt mu l".split())
INDUCTOR_INSTANCE = frozenset("inductance ic sens_ind temp dtemp m tc1 tc2 scale nt".split())
DIODE_MODEL = frozenset(
    "level is js jsw tnom tref rs trs trs1 trs2 n ns tt ttt1 ttt2 cjo cj0 cj vj pb m mj tm1 tm2 cjp cjsw php "
    "mjsw ikf ik ikr nbv area pj tlev tlevc eg xti cta ctc ctp tpb tvj tphp jtun jtunsw ntun xtitun keg kf "
    "af fc fcs bv ibv ib tcv isr nr fv_max bv_max id_max te_max pd_max rth0 cth0 lm lp wm wp xom xoi xm xp "
    "d".split()
)
DIODE_INSTANCE = frozenset("off temp dtemp ic area pj w l m lm lp wm wp thermal sens_area".split())

MODEL_PARAMETERS = {
    "nmos": LEVEL1_MODEL | LEVEL1_INSTANCE,
    "pmos": LEVEL1_MODEL | LEVEL1_INSTANCE,
    "r": RESISTOR_MODEL | RESISTOR_INSTANCE,
    "res": RESISTOR_MODEL | RESISTOR_INSTANCE,
    "c": CAPACITOR_MODEL | CAPACITOR_INSTANCE,
    "l": INDUCTOR_MODEL | INDUCTOR_INSTANCE,
    "d": DIODE_MODEL | DIODE_INSTANCE,
}
"""By kind of model, level 1 of a MOSFET; a model card may hold a device's own parameters as defaults."""

INSTANCE_PARAMETERS = {
    "r": RESISTOR_INSTANCE,
    "c": CAPACITOR_INSTANCE | {"q"},
    "l": INDUCTOR_INSTANCE | {"l"},
    "d": DIODE_INSTANCE,
    "m": LEVEL1_INSTANCE,
}
"""By letter of the element; a charge or inductance may be an expression of voltages or currents."""

FLAGS = frozenset({"off", "noisy", "thermal"})
"""Parameters that may stand without a value."""

KINDS = {
    "m": ("nmos", "pmos", "vdmos", "vdmosn", "vdmosp", "nsoi", "psoi", "numos"),
    "d": ("d", "numd"),
    "q": ("npn", "pnp", "lpnp", "nbjt"),
    "j": ("njf", "pjf"),
    "z": ("nmf", "pmf", "nhfet", "phfet"),
    "r": ("r", "res"),
    "c": ("c",),
    "l": ("l",),
    "s": ("sw",),
    "w": ("csw",),
    "u": ("urc",),
    "o": ("ltra",),
}
"""Kinds of models that an element of each letter may name, the usual ones first."""

SOURCE_NUMBERS = {"dc": 1, "ac": 2, "distof1": 2, "distof2": 2, "portnum": 1, "z0": 1, "pwr": 1, "freq": 1,
                  "phase": 1, "acmag": 1, "acphase": 1, "r": 1, "td": 1, "m": 1}  # fmt: skip
"""How many numbers may follow a word of an independent source."""

SOURCE_FUNCTIONS = frozenset("pulse sin sine exp pwl sffm am trnoise trrandom".split())

OPTIONS = frozenset(
    "absdv abstol acct autopartial autostop badmos3 bypass chgtol convabsstep convlimit convstep "
    "copynodesets cptime cshunt defad defas defl defm defw dyngmin enable_noisy_r epsmin filetype gmin "
    "gminfactor gminsteps gshunt ignoreeof indverbosity interp itl1 itl2 itl3 itl4 itl5 itl6 keepopinfo klu "
    "limpts limtim list lvlcod lvltim maxevtiter maxopalter maxord maxwarns method minbreak modelcard "
    "modelline newtrunc ngbehavior noacct noasciiplotvalue nobreak noclobber node nodedamping noinit nomod "
    "noopac noopalter noopiter nopage noprintscale norefvalue nostepsizelimit nosubckt notrnoise "
    "num_threads numdgt oldlimit optran opts pivrel pivtol plainlet ramptime rawfileprec reldv reltol "
    "rndseed rseries rshunt savecurrents savecurrents_bsim3 savecurrents_bsim4 savecurrents_mos1 scale "
    "scalm seed seedinfo sparse sqrnoise srcsteps statlocal strict_errorhandling strictnumparse temp tnom "
    "trtol trytocompact units vntol warn wnflag wr_singlescale wr_vecnames xmu xtrtol".split()
)
"""Names on ``.options`` cards that some ngspice acts on (from memory, and from the words in the program)."""

RESERVED_NODES = {
    "time": "it is the name of the time axis of a transient run, which then has its voltage and no time",
    "temper": "it is the temperature in expressions, and ngspice 39 crashes",
}
