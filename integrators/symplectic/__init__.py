"""Symplectic methods: splittings, extended phase space, time-transformed leapfrog."""
