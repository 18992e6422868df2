"""Numerical propagators: subjects to be judged, and a source where no closed form exists.

This package never imports the reference: what is judged must not share code with the truth.
"""

from truefall.integrators.ensemble import Ensemble, ensemble
from truefall.integrators.index import EQUATIONS, METHODS, Equations
from truefall.integrators.methods import Method
from truefall.integrators.run import Event, EventHit, Run, propagate

__all__ = ["EQUATIONS", "METHODS", "Ensemble", "Equations", "Event", "EventHit", "Method", "Run"]
__all__ += ["ensemble", "propagate"]
