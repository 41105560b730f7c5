"""The one answer: `result` (numbers), `columns` and `table` (for writing), `document` (JSON), `text` (for reading).

A leaf: imports only `errors` and `status` of the package. Reports import it; it imports no report.
"""

from stellerg.posterior.result import Piece, Posterior, StarDraws

__all__ = ["Piece", "Posterior", "StarDraws"]
