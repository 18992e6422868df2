"""Numerical propagators: subjects to be judged, and a source where no closed form exists.

This package never imports the reference: what is judged must not share code with the truth.
A beginning: two families of fixed-step methods on three charts.
"""

from truefall.integrators.equations import EQUATIONS, Equations
from truefall.integrators.methods import METHODS, Method
from truefall.integrators.run import Run, propagate

__all__ = ["EQUATIONS", "METHODS", "Equations", "Method", "Run", "propagate"]
