"""Findings as tables, figures and HTML."""
