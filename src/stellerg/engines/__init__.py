"""Methods that answer one Problem, each a frozen dataclass with `accepts` and `solve`, in one vocabulary.

`ENGINES` is the table that the rest of the package reads. Imports `problem` and what lies below it.
"""

from stellerg.engines.answer import Answer, Engine
from stellerg.engines.linear import Linear
from stellerg.engines.mcmc import MarkovChain
from stellerg.engines.montecarlo import MonteCarlo
from stellerg.engines.quadrature import Quadrature

__all__ = ["AUTO_ORDER", "ENGINES", "Answer", "Engine"]

ENGINES: dict[str, type] = {engine.name: engine for engine in (Quadrature, MonteCarlo, MarkovChain, Linear)}

# `auto` takes the first that accepts a row: cheapest first, and only engines that are exact.
AUTO_ORDER = ("quadrature", "montecarlo")
