"""The one answer: `result` holds the numbers.

`columns` and `table` are for writing, `document` is JSON, `content` is what is said of a star, laid out by `text` (a
terminal) and `html` (a notebook); `datatree` is for arviz. A leaf: imports only `errors`, `status`, `wording` and
`diagnostics` of the package. Reports import it; it imports no report.
"""

from stellerg.posterior.result import Piece, Posterior, StarDraws

__all__ = ["Piece", "Posterior", "StarDraws"]
