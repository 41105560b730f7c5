"""Tables of stars: `readers`, what the columns mean (`columns`), `writers`, and a whole run (`run`).

Imports `propagate` and `posterior`; imported by `cli` only.
"""
