"""Quantities, plans, rule sheets, verdicts, sections and remedies."""

from qa.engine import catalogue as catalogue  # importing any part registers every quantity
