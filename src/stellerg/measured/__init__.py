"""A measured value and its error: the assigned distributions (`shapes`), arrays of them (`values`), texts (`text`).

Imports only the leaves `errors` and `status`. `text` is the only module here that needs pyarrow; it is
imported where texts are met.
"""

from stellerg.measured.shapes import Scale, Shape
from stellerg.measured.values import Measured, assign

__all__ = ["Measured", "Scale", "Shape", "assign"]
