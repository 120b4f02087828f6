"""deckgen: hand analysis of transistor stages, proved in ngspice, gap by gap."""

__version__ = "0.1.0"

__all__ = ["__version__"]
