"""Tables of stars: `readers` by format, what the columns mean (`columns`), `writers`, and a whole run (`run`).

Imports `propagation` and `posterior`; imported by `cli` only.
"""
