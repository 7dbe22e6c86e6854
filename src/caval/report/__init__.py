"""Figures and reports of results."""
