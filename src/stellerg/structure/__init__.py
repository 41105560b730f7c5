"""The inside of a star: polytropes, densities, the calibration, what was observed of it, and the files of models.

`interior` brings them together for the stars of a problem. Imports `measured`, `keyed_random`, `diagnostics` (for
`learning`) and the leaves.
"""
