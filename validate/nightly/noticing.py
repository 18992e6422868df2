"""What is worth an alarm: tonight's figures against those of the nights before.

Accuracy figures are deterministic, so nothing here is statistics:

- Under one fingerprint of the environment (a *segment*) equal code gives equal bits.  Other bits
  are reported with the commits between; without any commit they are an alarm.
- An error that grew by the factor ``growth`` since the previous night, by more than its guard;
  a verdict that got worse; a margin that fell below its share; a case that vanished: alarms.
- An error that exceeds its *baseline* by the factor ``drift``, by more than its guard, however
  slowly it came there: an alarm.  The baseline is the first night of the segment, or the value
  that was accepted since.  Each alarm raises the *level* that the next has to exceed by the same
  factor, so a loss is an alarm on its first night; until it is mended or accepted it stands.
- A new fingerprint opens a new segment: bits are not compared, growth, verdicts and margins are.
  What stood before the change of environment goes on standing.
- Nothing gets a better or a worse baseline by itself within a segment: that takes an acceptance.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, field, replace

from truefall.validate.nightly.record import VERDICTS, Alarm, CaseRecord
from truefall.validate.nightly.suite import Thresholds

__all__ = ["Accepted", "Noticed", "Past", "Setting", "notice"]

_LEVELS = ("alarm", "standing", "note")
#: What is told first.
_GRAVITY = {
    "verdict-changed": 0, "error-grew": 1, "slow-drift": 2, "case-vanished": 3, "margin-shrank": 4,
    "not-deterministic": 5, "bits-changed": 6,
}  # fmt: skip
#: Allows for the rounding of "a factor of two" itself.
_SLACK = 1.0 - 1e-9


@dataclass(frozen=True)
class Past:
    """The latest figures of a case before tonight."""

    night: int
    verdict: str
    digest: str
    case_digest: str
    margin: float | None
    errors: Mapping[str, float]
    baseline: Mapping[str, float]
    level: Mapping[str, float]


@dataclass(frozen=True)
class Accepted:
    """Figures that somebody accepted: those of ``night``; ``gone`` if the case was dropped."""

    night: int
    errors: Mapping[str, float] = field(default_factory=dict)
    gone: bool = False


@dataclass(frozen=True)
class Setting:
    """All that noticing needs besides the figures.

    Attributes
    ----------
    night, previous : int, int or None
    segment : int
        Tonight's; equal to ``night`` in the first night of a segment.
    commits : tuple of str
        Of the code under test since the previous night.
    environment_changes : tuple of str
        Sentences, in the first night of a segment.
    missing : collection of str
        Keys that were missing in the previous night already.
    """

    night: int
    previous: int | None
    segment: int
    thresholds: Thresholds = field(default_factory=Thresholds)
    commits: tuple[str, ...] = ()
    environment_changes: tuple[str, ...] = ()
    accepted: Mapping[str, Accepted] = field(default_factory=dict)
    missing: Collection[str] = ()

    @property
    def opens(self) -> bool:
        """Whether tonight is the first of its segment."""
        return self.segment == self.night


@dataclass(frozen=True)
class Noticed:
    """Alarms (then what stands, then notes), the records with their baselines, missing keys."""

    alarms: tuple[Alarm, ...]
    cases: tuple[CaseRecord, ...]
    missing: tuple[str, ...]


def notice(
    cases: Sequence[CaseRecord],
    before: Mapping[str, Past],
    setting: Setting,
    nondeterministic: Collection[str] = (),
) -> Noticed:
    """Compare a night with what came before.

    Parameters
    ----------
    cases : sequence of CaseRecord
        Tonight's.
    before : mapping
        The latest figures of every key that was in the previous night or missing in it.
    nondeterministic : collection of str
        Keys of which two runs of tonight gave different bits.
    """
    alarms: list[Alarm] = []
    found: list[CaseRecord] = []
    if setting.opens and setting.previous is not None:
        changes = "; ".join(setting.environment_changes) or "its fingerprint changed"
        text = (
            f"the environment is another one than in night {setting.previous} ({changes}): a new "
            "segment begins, compared by bounds instead of bits"
        )
        alarms.append(Alarm("new-segment", "", text, level="note"))
    for record in cases:
        if record.key in nondeterministic:
            text = f"{record.key}: two runs of this night gave different numbers"
            alarms.append(Alarm("not-deterministic", record.key, text))
        past = before.get(record.key)
        if past is None or past.case_digest != record.case_digest:
            found.append(_first(record, past, setting, alarms))
        else:
            found.append(_again(record, past, setting, alarms))
    missing = _missing({c.key for c in cases}, before, setting, alarms)
    alarms.sort(key=lambda a: (_LEVELS.index(a.level), _GRAVITY.get(a.name, 9)))
    return Noticed(tuple(alarms), tuple(found), missing)


def _maxima(record: CaseRecord) -> dict[str, float]:
    return {q: e["max"] for q, e in record.errors.items() if e["max"] is not None}


def _first(
    record: CaseRecord, past: Past | None, setting: Setting, alarms: list[Alarm]
) -> CaseRecord:
    """A case that was not there before."""
    if setting.previous is not None:
        text = f"{record.key} is new"
        if past is not None:
            text = f"{record.key}: its orbit, times or budget changed; it counts as a new case"
        alarms.append(Alarm("new-case", record.key, text, level="note"))
    errors = _maxima(record)
    return replace(record, baseline=errors, level=errors)


def _again(record: CaseRecord, past: Past, setting: Setting, alarms: list[Alarm]) -> CaseRecord:
    """A case that was there before: everything that changed about it."""
    _verdict(record, past, alarms)
    _bits(record, past, setting, alarms)
    _margin(record, past, setting, alarms)
    return _errors(record, past, setting, alarms)


def _verdict(record: CaseRecord, past: Past, alarms: list[Alarm]) -> None:
    if record.verdict == past.verdict:
        return
    worse = VERDICTS.index(record.verdict) < VERDICTS.index(past.verdict)
    reason = f": {record.reason}" if record.reason else ""
    text = f"{record.key} was {past.verdict} in night {past.night} and is {record.verdict}{reason}"
    alarms.append(Alarm("verdict-changed", record.key, text, level="alarm" if worse else "note"))


def _bits(record: CaseRecord, past: Past, setting: Setting, alarms: list[Alarm]) -> None:
    if setting.opens or not record.digest or not past.digest or record.digest == past.digest:
        return
    text = f"{record.key} gave other bits than in night {past.night} in the same environment"
    if setting.commits:
        count = len(setting.commits)
        text += f"; {count} commit{'s' if count > 1 else ''} between"
    else:
        text += ", and no commit explains it"
    level = "note" if setting.commits else "alarm"
    alarms.append(Alarm("bits-changed", record.key, text, commits=setting.commits, level=level))


def _margin(record: CaseRecord, past: Past, setting: Setting, alarms: list[Alarm]) -> None:
    share = setting.thresholds.margin
    now, then = record.margin, past.margin
    if now is None or then is None or record.verdict != "pass" or not now < share <= then:
        return
    text = (
        f"{record.key} has {now:.1%} of its budget left, in night {past.night} it had {then:.1%}; "
        f"the alarm is set to {share:.1%}"
    )
    alarms.append(
        Alarm("margin-shrank", record.key, text, before=then, after=now, commits=setting.commits)
    )


def _baseline(record: CaseRecord, past: Past, setting: Setting) -> tuple[dict[str, float], bool]:
    """What errors are held against in the long run, and whether it was accepted last night."""
    accepted = setting.accepted.get(record.key)
    if accepted is None or accepted.gone or accepted.night != past.night:
        return dict(past.baseline), False  # an older acceptance is in the baseline already
    return {**past.baseline, **accepted.errors}, True


def _errors(record: CaseRecord, past: Past, setting: Setting, alarms: list[Alarm]) -> CaseRecord:
    """Growth since the previous night, drift since the baseline, and what stands."""
    limits = setting.thresholds
    errors = _maxima(record)
    baseline, fresh = _baseline(record, past, setting)
    level = dict(baseline if fresh else past.level)
    grew: list[tuple[str, float, float]] = []
    drifted: list[tuple[str, float, float]] = []
    standing: list[tuple[str, float, float]] = []
    improved: list[tuple[str, float, float]] = []
    for quantity, error in errors.items():
        guard = record.guards.get(quantity, 0.0)
        base = baseline.setdefault(quantity, error)
        height = max(level.get(quantity, base), base)
        then = past.errors.get(quantity)
        worse = error > limits.drift * base and error - base > guard
        if then is not None and error >= limits.growth * then * _SLACK and error - then > guard:
            grew.append((quantity, then, error))
            height = error
        elif setting.opens:
            if not (worse and height > base):  # nothing stood: the new segment starts here
                base = height = error
            else:
                standing.append((quantity, base, error))
        elif error > limits.drift * height and error - height > guard:
            drifted.append((quantity, base, error))
            height = error
        elif worse:
            standing.append((quantity, base, error))
        else:
            height = base
            if error * limits.growth < base and base - error > guard:
                was = past.errors.get(quantity, base)
                if not was * limits.growth < base:
                    improved.append((quantity, base, error))
        baseline[quantity], level[quantity] = base, height
    since = f"since night {past.night}"
    _say("error-grew", "alarm", grew, since, record, setting, alarms)
    first = "since its baseline (the first night of the segment, or what was accepted)"
    _say("slow-drift", "alarm", [] if grew else drifted, first, record, setting, alarms)
    if not grew and not drifted:
        _say("still-worse", "standing", standing, first, record, setting, alarms)
    _say("improved", "note", improved, first + "; accept it to hold it", record, setting, alarms)
    if fresh:
        text = f"{record.key}: the figures of night {past.night} were accepted"
        alarms.append(Alarm("accepted", record.key, text, level="note"))
    return replace(record, baseline=baseline, level=level)


def _say(
    name: str, level: str, which: Sequence[tuple[str, float, float]], since: str,
    record: CaseRecord, setting: Setting, alarms: list[Alarm],
) -> None:  # fmt: skip
    """One alarm for all quantities of a case: position first, then by how much they changed."""
    if not which:
        return
    ordered = sorted(
        which, key=lambda w: (w[0] != "position", -(w[2] / w[1] if w[1] > 0 else float("inf")))
    )
    quantity, before, after = ordered[0]
    factor = f"{after / before:.3g} times" if before > 0 else "from nothing"
    verb = {"error-grew": "grew", "slow-drift": "drifted", "still-worse": "is still",
            "improved": "improved"}[name]  # fmt: skip
    label = quantity.replace("_", " ")
    unit = _unit(quantity, record)
    text = (
        f"{record.key}: the largest {label} error {verb} {factor}, from {before:.3g} to "
        f"{after:.3g}{unit}, {since}"
    )
    if name == "still-worse":
        text = (
            f"{record.key}: the largest {label} error is still {factor} what it was, {after:.3g} "
            f"instead of {before:.3g}{unit}, {since}; mend or accept it"
        )
    if len(ordered) > 1:
        text += f" (also {', '.join(w[0].replace('_', ' ') for w in ordered[1:])})"
    alarms.append(
        Alarm(name, record.key, text, before, after,
              setting.commits if level == "alarm" else (), level)
    )  # fmt: skip


def _unit(quantity: str, record: CaseRecord) -> str:
    length, time = record.unit_length, record.unit_time
    if length == "1":
        return ""
    return {"position": f" {length}", "velocity": f" {length}/{time}",
            "clock": f" {length if record.orbit_class.startswith('light') else time}"}.get(
                quantity, "")  # fmt: skip


def _missing(
    there: Collection[str], before: Mapping[str, Past], setting: Setting, alarms: list[Alarm]
) -> tuple[str, ...]:
    """Cases that were there once and are not."""
    found = []
    for key in sorted(set(before) - set(there)):
        accepted = setting.accepted.get(key)
        if accepted is not None and accepted.gone and accepted.night >= before[key].night:
            continue
        found.append(key)
        if key in setting.missing:
            text = f"{key} is still missing (last in night {before[key].night}); accept its end"
            alarms.append(Alarm("still-missing", key, text, level="standing"))
        else:
            text = f"{key} vanished: it ran in night {before[key].night} and did not run tonight"
            alarms.append(Alarm("case-vanished", key, text))
    return tuple(found)
