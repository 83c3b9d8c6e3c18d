"""Lagscape: judges delayed negative-feedback loops in patients."""
