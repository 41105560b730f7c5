"""Judgements that come with every result: budget, consistency, validity.

They take a problem and an answer, never a Posterior. Imports `engines` and what lies below.
"""
