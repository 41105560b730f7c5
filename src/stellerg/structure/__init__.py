"""The inside of a star: polytropes, densities of structure (`distributions`, `model`) and the files that hold them.

Imports only the leaf `errors`.
"""
