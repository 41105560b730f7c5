"""Judgements that come with every result: budget, consistency, validity, what is left out of the inside.

They take a problem and an answer, never a Posterior. Imports `engines` and what lies below.
"""
