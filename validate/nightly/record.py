"""What one night consists of: plain data, from which results, trends and pages are made.

Nothing here computes.  A ``Night`` is what is stored in the night's HDF5 result set and read back
from it; pages are made from it alone.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import numpy as np
    import numpy.typing as npt

__all__ = [
    "ALARMS",
    "INFORMATION",
    "OUTCOMES",
    "QUANTITIES",
    "STANDING",
    "VERDICTS",
    "Alarm",
    "CaseRecord",
    "Night",
    "Trend",
]

#: Verdicts of a case, the worst first; those of ``check`` and "not-run".
VERDICTS = ("unusable", "not-run", "fail", "undecided", "not-judged", "pass")
#: How a program under test ended; only "ran" is followed by a judgement of its numbers.
OUTCOMES = (
    "ran",
    "crashed",
    "timed out",
    "memory limit",
    "could not start",
    "no output",
    "wrote elsewhere",
    "output too large",
    "output refused",
    "wrong rows",
    "worker lost",
    "fault of truefall",
)
#: Quantities whose errors are recorded.
QUANTITIES = ("position", "velocity", "clock", "energy", "angular_momentum")
#: Names of alarms: a night on which one appears has exit status 1 at least.
ALARMS = (
    "not-deterministic",
    "bits-changed",
    "error-grew",
    "verdict-changed",
    "margin-shrank",
    "slow-drift",
    "case-vanished",
)
#: Alarms of earlier nights that nobody has mended or accepted since; exit status 1 as well.
STANDING = ("still-worse", "still-missing")
#: Names of notes, which change no exit status.  "bits-changed" and "verdict-changed" are notes
#: where commits explain the one, or where the other is for the better.
INFORMATION = ("new-segment", "new-case", "improved", "accepted")


@dataclass(frozen=True)
class CaseRecord:
    """One propagator on one case in one night.

    Parameters
    ----------
    key : str
        Unique and stable: "propagator/case".
    propagator, case : str
    verdict : str
        One of ``VERDICTS``.
    reason : str
        One sentence for a verdict that no tolerance explains; "" otherwise.
    outcome : str
        One of ``OUTCOMES``.
    errors : mapping
        Of each quantity that could be compared (``QUANTITIES``): "max" and "rms" of obtained
        minus expected in the case's own units (energy and angular_momentum: relative drifts),
        "at_time" of the maximum or None.
    budget : mapping of str to float
        The tolerances as given, in the case's own units.
    margin : float or None
        The share of the budget that is left, 1 - (d + w)/T, the smallest of all tolerances;
        negative past it, None without a budget.
    floor : float or None
        The smallest position error that this output could reveal, in the case's length unit.
    guard : float or None
        The guard w of the position at its maximum: all that could make the error wrong.
    unit_length : str
        "1" (GM/c^2), "m" or "km".
    unit_time : str
        "1" (GM/c^3) or "s".
    curve : tuple of two tuples of float
        Times and position errors for a small picture, at most 200 of each.
    findings : tuple of dict
        Causes, as in the JSON document of ``check``.
    description : str
        The residual in words where no cause explains it.
    seconds : float
        Run time of the program under test; kept apart from all accuracy figures.
    stdout_tail, stderr_tail : str
        The last that the program printed, bounded.
    orbit_class : str
    orbit : mapping
        The orbit in the words of ``check``: class, energy, periapsis and so on.
    result_set : str
        Path of the HDF5 result set, relative to the output folder.
    digest : str
        SHA-256 over the obtained numbers (time, position, velocity, clock), "" without any.
    title, why : str
        From the catalogue: what the case is and what makes it hard.
    case_digest : str
        Of the orbit, the times and the budget: another one is another case of the same name.
    guards : mapping of str to float
        The guard of each quantity in ``errors`` at its maximum.
    baseline, level : mapping of str to float
        What later nights hold the errors against (see :mod:`.noticing`).
    """

    key: str
    propagator: str
    case: str
    verdict: str
    reason: str = ""
    outcome: str = "ran"
    errors: Mapping[str, Mapping[str, float | None]] = field(default_factory=dict)
    budget: Mapping[str, float] = field(default_factory=dict)
    margin: float | None = None
    floor: float | None = None
    guard: float | None = None
    unit_length: str = "1"
    unit_time: str = "1"
    curve: tuple[tuple[float, ...], tuple[float, ...]] = ((), ())
    findings: tuple[Mapping[str, Any], ...] = ()
    description: str = ""
    seconds: float = 0.0
    stdout_tail: str = ""
    stderr_tail: str = ""
    orbit_class: str = ""
    orbit: Mapping[str, Any] = field(default_factory=dict)
    result_set: str = ""
    digest: str = ""
    title: str = ""
    why: str = ""
    case_digest: str = ""
    guards: Mapping[str, float] = field(default_factory=dict)
    baseline: Mapping[str, float] = field(default_factory=dict)
    level: Mapping[str, float] = field(default_factory=dict)

    @property
    def position_error(self) -> float | None:
        """The largest position error, None where there is none."""
        return self.errors.get("position", {}).get("max")


@dataclass(frozen=True)
class Alarm:
    """One thing noticed.

    Parameters
    ----------
    name : str
        One of ``ALARMS``, ``STANDING`` or ``INFORMATION``.
    key : str
        The case's, or "" for the whole night.
    text : str
        One sentence.
    before, after : float or None
        What is spoken of, in the case's own units.
    commits : tuple of str
        Those of the code under test between the two nights, the newest first: "hash subject".
    level : str
        "alarm", "standing" or "note".
    """

    name: str
    key: str
    text: str
    before: float | None = None
    after: float | None = None
    commits: tuple[str, ...] = ()
    level: str = "alarm"

    @property
    def is_alarm(self) -> bool:
        """False for what stands since an earlier night and for notes."""
        return self.level == "alarm"


@dataclass(frozen=True)
class Night:
    """One night: what ran, how it was judged, what was noticed.

    Parameters
    ----------
    number : int
        1 for the first, then one more each night.
    started : str
        UTC, ISO 8601.
    suite : str
        The suite's name.
    verdict : str
        The worst of the cases.
    exit_status : int
        As documented for the command, alarms included.
    cases : tuple of CaseRecord
        In the order of their keys.
    alarms : tuple of Alarm
        Alarms first, then information.
    previous : int or None
        The night it was compared with.
    environment : mapping of str to str
        The parts of the fingerprint.
    fingerprint : str
        A digest of ``environment``; a new one opens a new segment.
    segment : int
        Number of the first night of this segment.
    commit : str or None
        Of the code under test, with "+changes" if the checkout was not clean.
    commits : tuple of str
        Those since the previous night, the newest first.
    result_set : str
        File name of this night's HDF5 file, relative to the output folder.
    seconds : float
        Wall-clock time of the whole night.
    undecided : str
        "error", "skip" or "pass": what an undecided case counts as.
    missing : tuple of str
        Keys of cases that vanished in this or an earlier night and were not accepted as gone.
    """

    number: int
    started: str
    suite: str
    verdict: str
    exit_status: int
    cases: tuple[CaseRecord, ...]
    alarms: tuple[Alarm, ...] = ()
    previous: int | None = None
    environment: Mapping[str, str] = field(default_factory=dict)
    fingerprint: str = ""
    segment: int = 1
    commit: str | None = None
    commits: tuple[str, ...] = ()
    result_set: str = ""
    seconds: float = 0.0
    undecided: str = "error"
    missing: tuple[str, ...] = ()


@dataclass(frozen=True, eq=False)
class Trend:
    """One case over the nights, the oldest first.

    Parameters
    ----------
    nights : int array, (k,)
    error : float array, (k,)
        Largest position error of each night in the case's length unit; NaN where there is none.
    verdicts : tuple of str, k
    segments : int array, (k,)
        The first night of the segment that each night belongs to.
    seconds : float array, (k,)
        Run times.
    """

    nights: npt.NDArray[np.int64]
    error: npt.NDArray[np.float64]
    verdicts: tuple[str, ...]
    segments: npt.NDArray[np.int64]
    seconds: npt.NDArray[np.float64]
