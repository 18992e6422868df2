"""Reports of a check: text for people, one JSON document for machines, pictures."""

from __future__ import annotations

import json
import re
from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Sequence

    from truefall.validate.check import CheckResult

__all__ = ["write_report"]


def _numbered(base: str, count: int) -> list[str]:
    """``base``, ``base-2``, ... enough for ``count`` others to be taken."""
    return [base, *(f"{base}-{k}" for k in range(2, count + 2))]


def write_report(results: Sequence[CheckResult], directory: str | Path) -> list[Path]:
    """Write ``report.txt``, ``report.json`` and a picture for each trajectory.

    Raises
    ------
    InputError
        If the folder cannot be written.
    """
    from truefall.validate.errors import InputError
    from truefall.validate.report.document import document
    from truefall.validate.report.figures import write_figures
    from truefall.validate.report.findings import write_findings_figures
    from truefall.validate.report.text import render

    folder = Path(directory)
    try:
        folder.mkdir(parents=True, exist_ok=True)
        written = [folder / "report.txt", folder / "report.json"]
        written[0].write_text("\n\n".join(render(r) for r in results) + "\n", encoding="utf-8")
        text = json.dumps(document(results), indent=1, allow_nan=False)
        written[1].write_text(text + "\n", encoding="utf-8")
        used: set[str] = set()
        for result in results:
            base = re.sub(r"[^A-Za-z0-9_-]+", "-", result.name).strip("-") or "trajectory"
            stem = next(s for s in _numbered(base, len(results)) if s not in used)
            used.add(stem)
            written += write_figures(result, folder, stem)
            written += write_findings_figures(result, folder, stem)
    except OSError as error:
        raise InputError(f"cannot be written ({error.strerror or error})", folder) from None
    return written
