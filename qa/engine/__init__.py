"""Quantities, plans, rule sheets, verdicts, sections and remedies."""
