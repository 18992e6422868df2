"""The night as one JSON document: everything a page shows, in plain numbers."""

from __future__ import annotations

import json
import math
from dataclasses import asdict
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from truefall.validate.nightly.record import Night

__all__ = ["SCHEMA_VERSION", "report_document", "report_text"]

#: Rises by 1 when a key changes its meaning or goes.
SCHEMA_VERSION = 1


def _plain(value: Any) -> Any:
    """What JSON can hold: no NaN, no infinity, tuples as lists."""
    if isinstance(value, dict):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(v) for v in value]
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    return value


def report_document(night: Night) -> dict[str, Any]:
    """The document as plain Python: ``schema_version`` and the fields of :class:`Night`."""
    from truefall.validate.nightly.pages.words import headline, summary_line

    found: dict[str, Any] = _plain(
        {
            "schema": "truefall-night",
            "schema_version": SCHEMA_VERSION,
            "headline": headline(night),
            "summary": summary_line(night),
            **asdict(night),
        }
    )
    return found


def report_text(night: Night) -> str:
    """The document as text; in ASCII, since names may hold what UTF-8 cannot (lone surrogates)."""
    return json.dumps(report_document(night), indent=1, allow_nan=False) + "\n"
