"""The truth: exact Schwarzschild geodesics with proven bounds, charts, units, landmarks."""

from truefall.reference.exact.start import StartError
from truefall.reference.orbit import Orbit
from truefall.reference.states import Bounded, End, EndReached, States

__all__ = ["Bounded", "End", "EndReached", "Orbit", "StartError", "States"]
