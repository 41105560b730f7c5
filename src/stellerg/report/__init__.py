"""Figures, tables and texts for people: of a star's answer, of several priors, of what was read, of structure models.

Imports `propagation`, `posterior`, `stars` and `structure`; nothing imports it but `cli`.
"""
