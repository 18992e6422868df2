"""Seeded faults: a small outside propagator, and what its files get wrong on purpose."""
