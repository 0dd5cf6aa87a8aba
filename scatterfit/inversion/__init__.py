"""Baseline and noise, global search, refinement, alternatives, uncertainty, verdict."""
