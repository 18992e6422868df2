"""What a night leaves to read: a page, a JSON document, JUnit XML, and one line."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING

from truefall.validate.nightly.pages.words import summary_line

if TYPE_CHECKING:
    from truefall.validate.nightly.record import Night, Trend

__all__ = ["summary_line", "write_pages"]


def write_pages(night: Night, trends: Mapping[str, Trend], folder: Path) -> list[Path]:
    """Write ``index.html``, ``report.json`` and ``junit.xml`` of a night.

    Parameters
    ----------
    night : Night
    trends : mapping of case key to Trend
        Cases without one get no trend picture.
    folder : Path
        Must exist.

    Returns
    -------
    list of Path

    Raises
    ------
    InputError
        If a file cannot be written; nothing half-written is left.
    """
    from truefall.validate.formats.files import replace_file
    from truefall.validate.nightly.pages.html_page import night_page
    from truefall.validate.nightly.pages.json_report import report_text
    from truefall.validate.nightly.pages.junit import junit_xml

    written = []
    for name, text in (
        ("index.html", night_page(night, trends)),
        ("report.json", report_text(night)),
        ("junit.xml", junit_xml(night)),
    ):
        data = text.encode("utf-8")

        def put(path: Path, data: bytes = data) -> None:
            path.write_bytes(data)

        replace_file(folder / name, put)
        written.append(folder / name)
    return written
