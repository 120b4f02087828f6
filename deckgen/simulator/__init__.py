"""Running ngspice: which one, in what surroundings, what it answered and whether to believe it.

The bottom package: it knows texts, files and numbers, nothing of stages.
"""

from deckgen.simulator.job import Execution, ExpectedPlot, Job, Limits
from deckgen.simulator.locate import Simulator, find
from deckgen.simulator.probe import Capability, capabilities
from deckgen.simulator.process import stop_all
from deckgen.simulator.raw import Plot, RawFileError, Variable, read_raw
from deckgen.simulator.run import run

__all__ = [
    "Capability",
    "Execution",
    "ExpectedPlot",
    "Job",
    "Limits",
    "Plot",
    "RawFileError",
    "Simulator",
    "Variable",
    "capabilities",
    "find",
    "read_raw",
    "run",
    "stop_all",
]
