"""Figures, pages and the dated PDF."""
