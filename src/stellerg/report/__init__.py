"""Figures and tables for people. Imports `posterior`, and `stars` for what was read; nothing imports it but `cli`."""
