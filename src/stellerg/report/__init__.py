"""Figures, tables and texts for people: of a star's answer, of what was read, of a structure model.

Imports `posterior`, `stars` and `structure`; nothing imports it but `cli`.
"""
