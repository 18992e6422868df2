"""Synthetic nights for the tests of the pages: many cases, many nights, hostile names."""

from __future__ import annotations

import numpy as np

from truefall.validate.nightly.record import Alarm, CaseRecord, Night, Trend

HOSTILE = (
    "<script>document.title='broken'</script>",
    '"><img src=x onerror="document.title=\'broken\'">',
    "a" * 300,
    "bell\x07 escape\x1b[31m null\x00",
    "Ω-tempest & <b>bold</b> 'quote'",
    "]]><!-- --><style>*{display:none}</style>",
)


def case(k: int, verdict: str = "pass", name: str | None = None, **more) -> CaseRecord:
    """A case with a curve and figures of its own."""
    rng = np.random.default_rng(k)
    times = np.linspace(0.0, 1000.0, 80)
    errors = 10.0 ** (-9 + 2 * times / 1000 + 0.2 * rng.standard_normal(80))
    name = f"case-{k:02d}" if name is None else name
    fields = {
        "key": f"ours/{name}", "propagator": "ours", "case": name, "verdict": verdict,
        "errors": {
            "position": {"max": float(errors.max()), "rms": float(errors.mean()), "at_time": 990.0},
            "energy": {"max": 1e-11, "rms": 2e-12, "at_time": None},
        },
        "budget": {"position": 1e-6}, "margin": 0.9 if verdict == "pass" else -0.5,
        "floor": 1e-15, "unit_length": "m", "unit_time": "s", "orbit_class": "bound",
        "curve": (tuple(times.tolist()), tuple(errors.tolist())), "seconds": 0.012,
        "title": "An orbit", "why": "hard to get right", "result_set": "nights/00400.h5",
        "digest": "0123456789abcdef" * 4,
    }  # fmt: skip
    return CaseRecord(**(fields | more))


def trend(k: int, nights: int) -> Trend:
    """So many nights in two segments."""
    rng = np.random.default_rng(k)
    number = np.arange(1, nights + 1)
    return Trend(
        number, 1e-7 * np.exp(0.01 * rng.standard_normal(nights)), ("pass",) * nights,
        np.where(number > nights // 2, nights // 2 + 1, 1), np.full(nights, 0.01),
    )  # fmt: skip


def night(cases: tuple[CaseRecord, ...], **more) -> Night:
    """A night of these cases."""
    fields = {
        "number": 400, "started": "2031-03-04T02:10:00Z", "suite": "halden",
        "verdict": "fail", "exit_status": 1, "cases": cases, "previous": 399,
        "environment": {"python": "3.11.7", "machine": "x86_64", "numpy": "2.1.0"},
        "fingerprint": "f" * 64, "segment": 201, "commit": "0a1b2c3d", "seconds": 4.2,
        "commits": ("0a1b2c3d tidy the step control",), "result_set": "nights/00400.h5",
    }  # fmt: skip
    return Night(**(fields | more))


def large_night(cases: int = 60, nights: int = 400) -> tuple[Night, dict[str, Trend]]:
    """Sixty cases over four hundred nights, one of each unpleasant kind among them."""
    records = [case(k) for k in range(cases)]
    records[3] = case(
        3, "fail",
        findings=(
            {
                "cause": "gm-scaled", "family": "constants", "explains": 0.9998,
                "text": "gm is too large by 1.5505e-8: the TCB value where the TDB value was meant",
                "look_at": "the constant gm, and the time scale that it belongs to",
            },
        ),
    )  # fmt: skip
    records[7] = case(7, "undecided", reason="the output has too few digits for this budget")
    records[11] = case(
        11, "not-run", outcome="timed out", errors={}, curve=((), ()), margin=None,
        reason="the program was stopped after 60 s", stderr_tail="step 1\nstep 2\n\x1b[31mstep 3",
    )  # fmt: skip
    alarms = (
        Alarm("error-grew", "ours/case-03", "the largest position error grew from 2.1e-9 m to "
              "9.9e-8 m", 2.1e-9, 9.9e-8, ("0a1b2c3d tidy the step control",)),
        Alarm("still-worse", "ours/case-07", "since night 391", level="standing"),
        Alarm("new-case", "ours/case-59", "judged for the first time", level="note"),
    )  # fmt: skip
    found = night(tuple(records), alarms=alarms)
    return found, {r.key: trend(k, nights) for k, r in enumerate(records)}


def hostile_night() -> tuple[Night, dict[str, Trend]]:
    """Every text that somebody else may choose is hostile."""
    records = tuple(
        case(
            k, "fail", name=text, reason=text, title=text, stderr_tail=text * 3, stdout_tail=text,
            findings=({"cause": text, "family": text, "text": text, "look_at": text},),
        )
        for k, text in enumerate(HOSTILE)
    )  # fmt: skip
    alarms = tuple(Alarm("error-grew", r.key, r.case, 1.0, 2.0, (r.case,)) for r in records)
    found = night(
        records, alarms=alarms, suite=HOSTILE[0], commit=HOSTILE[1], commits=HOSTILE,
        environment={t: t for t in HOSTILE}, missing=(f"ours/{HOSTILE[1]}",),
    )  # fmt: skip
    return found, {r.key: trend(k, 30) for k, r in enumerate(records)}
