"""The demo's index page: one file with its pictures inside, no network, light and dark."""

from __future__ import annotations

import base64
import html
from collections.abc import Sequence
from dataclasses import dataclass

__all__ = ["Chapter", "page"]


@dataclass(frozen=True)
class Chapter:
    """A story as told on the page; ``pictures`` are links relative to the page, and PNG bytes."""

    name: str
    word: str
    text: str
    pictures: tuple[tuple[str, bytes], ...]
    report: str


_MARKS = {"PASS": "✓", "FAIL": "✗", "UNDECIDED": "?"}
_STYLE = """
:root { color-scheme: light dark; --line: #8886; --pass: #1a7f37; --fail: #c1272d;
        --undecided: #9a6700; }
@media (prefers-color-scheme: dark) {
  :root { --pass: #4ac26b; --fail: #ff7b72; --undecided: #d4a72c; }
}
body { font: 16px/1.55 system-ui, sans-serif; max-width: 62rem; margin: 2rem auto;
       padding: 0 1rem; }
table { border-collapse: collapse; width: 100%; }
td, th { text-align: left; padding: .35rem .8rem .35rem 0; border-bottom: 1px solid var(--line); }
section { margin-top: 3rem; border-top: 1px solid var(--line); }
img { max-width: 100%; height: auto; background: white; }
pre { overflow-x: auto; font-size: .82rem; line-height: 1.4; }
.word { font-weight: 700; white-space: nowrap; }
.PASS { color: var(--pass); } .FAIL { color: var(--fail); }
.UNDECIDED { color: var(--undecided); }
:focus-visible { outline: 3px solid; outline-offset: 2px; }
caption { text-align: left; }
@media (max-width: 34rem) {
  h1 { font-size: 1.5rem; } .runs td, .runs th { padding-right: .5rem; font-size: .92rem; }
  pre { font-size: .72rem; }
}
@media print {
  :root { color-scheme: light; --pass: #1a7f37; --fail: #c1272d; --undecided: #9a6700; }
  body { margin: 0; max-width: none; font-size: 10pt; }
  section { margin-top: 0; border: 0; break-before: page; } h2, p { break-after: avoid; }
  img { max-height: 17cm; } pre { font-size: 7.5pt; white-space: pre-wrap; }
}
"""
_POLICY = "default-src 'none'; style-src 'unsafe-inline'; img-src data:"


def _word(chapter: Chapter) -> str:
    kind = html.escape(chapter.word.replace(" ", "-"))
    mark = _MARKS.get(chapter.word, "")
    return f'<span class="word {kind}">{mark} {html.escape(chapter.word)}</span>'


def page(chapters: Sequence[Chapter]) -> str:
    """The whole page."""
    rows, parts = [], []
    for c in chapters:
        name, text = html.escape(c.name), html.escape(c.text)
        rows.append(
            f'<tr><td>{_word(c)}</td><th scope="row"><a href="#{name}">{name}</a></th>'
            f"<td>{text}</td></tr>"
        )
        pictures = "\n".join(
            f'<p><a href="{html.escape(link)}"><img alt="{name}: orbit, errors and invariants" '
            f'src="data:image/png;base64,{base64.b64encode(png).decode()}"></a></p>'
            for link, png in c.pictures
        )
        parts.append(
            f'<section id="{name}">\n<h2>{_word(c)} {name}</h2>\n<p>{text}. Files: '
            f'<a href="input/{name}.csv">trajectory</a>, <a href="input/{name}.toml">orbit</a>, '
            f'<a href="{name}/report.json">report as JSON</a>.</p>\n{pictures}\n'
            f'<pre tabindex="0" role="region" aria-label="report of {name}">'
            f"{html.escape(c.report)}</pre>\n</section>"
        )
    return f"""<!doctype html>
<html lang="en"><head><meta charset="utf-8"><title>truefall demo</title>
<meta http-equiv="Content-Security-Policy" content="{_POLICY}">
<meta name="viewport" content="width=device-width, initial-scale=1">
<style>{_STYLE}</style></head><body>
<main>
<h1>Eight runs of one propagator</h1>
<p>Invented data. The survey ship Halden keeps station off Corrow, a compact remnant; a beacon
circles the Earth. Each file was judged by <code>truefall check</code> against the exact solution
at its own time stamps. The exact path of probe Tern, with proven bounds, is in
<a href="reference/tern.h5">reference/tern.h5</a>.</p>
<table class="runs">
<caption>What was run, and how it was judged</caption>
<tr><th scope="col">verdict</th><th scope="col">file</th><th scope="col">what was run</th></tr>
{chr(10).join(rows)}
</table>
{chr(10).join(parts)}
</main>
</body></html>
"""
