"""Figures and the one-page report."""
