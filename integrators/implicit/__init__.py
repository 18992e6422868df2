"""Collocation methods whose stages are found by iteration."""
