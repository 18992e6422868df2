"""What an explanation is made of: plain data, for reports and for machines."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

__all__ = ["FAMILIES", "Explanation", "Finding", "Value"]

Floats = npt.NDArray[np.float64]
FAMILIES = ("constants", "model", "chart", "clock", "units", "start", "numerics", "forces")


@dataclass(frozen=True)
class Value:
    """A fitted parameter in the file's units; ``uncertainty`` is one standard deviation.

    None where the parameter is one of a list (a chart's name, a number of digits).
    """

    value: float | str
    uncertainty: float | None
    unit: str

    def as_json(self) -> dict[str, float | str | None]:
        return {"value": self.value, "uncertainty": self.uncertainty, "unit": self.unit}


@dataclass(frozen=True)
class Finding:
    """One cause of a residual.

    Attributes
    ----------
    cause : str
        Stable name, such as "gm-scaled".
    family : str
        One of :data:`FAMILIES`.
    explains : float
        Share of the squared residual, in units of its floor, that the cause removes.  Of causes
        found one after the other, each one's share is of the whole residual.
    parameters : mapping
        Fitted numbers by name.
    text, look_at : str
        What it is, and what to look at.
    before, after : (n,)
        Size of the position residual without and with the cause, in the file's unit.
    """

    cause: str
    family: str
    explains: float
    parameters: Mapping[str, Value]
    text: str
    look_at: str
    before: Floats
    after: Floats

    def as_json(self) -> dict[str, object]:
        return {
            "cause": self.cause,
            "family": self.family,
            "explains": self.explains,
            "parameters": {k: v.as_json() for k, v in self.parameters.items()},
            "text": self.text,
            "look_at": self.look_at,
        }


@dataclass(frozen=True)
class Explanation:
    """All that is known about why a trajectory disagrees.

    Attributes
    ----------
    findings : tuple of Finding
        Ranked, best first; empty where nothing explains the residual.
    description : str
        The residual in words, where nothing in the list explains it; else "".
    ambiguous : tuple of sets of str
        Names of causes that this arc cannot tell apart.
    remainder : (n,) array or None
        Size of the position residual that all findings leave, in the file's unit.
    unexplained : bool
        Whether there is a residual that nothing explains.
    """

    findings: tuple[Finding, ...] = ()
    description: str = ""
    ambiguous: tuple[frozenset[str], ...] = ()
    remainder: Floats | None = field(default=None, repr=False)
    unexplained: bool = False
