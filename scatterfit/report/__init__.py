"""Rounding, tables, figures, page."""
