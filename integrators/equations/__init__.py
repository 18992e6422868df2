"""Equations of motion, GM = c = 1: one file for each set, one line in the index.

Every spherically symmetric chart, with time ``T``, radius ``R = |x|`` and ``n = x/R``, has an
inverse metric ``g^TT = -a``, ``g^TR = b``, ``g^ij = c delta_ij + d n_i n_j``, so with the
conserved ``p_T = -E``::

    H = (-a E^2 - 2 b E (n.p) + c p^2 + d (n.p)^2) / 2      (-1/2 for particles, 0 for light)

A chart's file gives the eight numbers a, a', b, b', c, c', d, d' at a radius, each from an
expression that does not cancel, and the same as power series for the Taylor method.  E multiplies
and is never subtracted: weak fields (1e-9) keep their digits.
"""
