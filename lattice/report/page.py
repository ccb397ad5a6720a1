"""A report as one HTML page that needs nothing else: no network, no other files, no scripts."""

from __future__ import annotations

import base64
import re
from html import escape
from pathlib import Path

from lattice.report.document import Caution, Chapter, Commands, Document, Figure, Part, Table, Text

STYLE = Path(__file__).with_name("page.css")


def to_html(document: Document) -> str:
    """Return the page of a report."""
    chapters = "\n".join(_chapter(chapter, number) for number, chapter in enumerate(document.chapters))
    links = "".join(
        f'<li><a href="#part-{number}">{escape(chapter.title)}</a></li>'
        for number, chapter in enumerate(document.chapters)
        if chapter.level == 2
    )
    return f"""<!DOCTYPE html>
<html lang="{document.language}">
<head>
<meta charset="utf-8">
<meta name="viewport" content="width=device-width, initial-scale=1">
<meta name="color-scheme" content="light dark">
<link rel="icon" href="data:,">
<title>{escape(document.title)}</title>
<style>
{STYLE.read_text(encoding="utf-8")}</style>
</head>
<body>
<header><h1>{escape(document.title)}</h1>
<p class="lead">{_marked_up(document.lead)}</p></header>
<nav aria-label="Contents"><ul>{links}</ul></nav>
<main>
{chapters}
</main>
<footer><p>{escape(document.foot)}</p></footer>
</body>
</html>
"""


def _chapter(chapter: Chapter, number: int) -> str:
    parts = "\n".join(_part(part) for part in chapter.parts)
    heading = f"h{chapter.level}"
    return f'<section id="part-{number}"><{heading}>{escape(chapter.title)}</{heading}>\n{parts}\n</section>'


def _part(part: Part) -> str:
    match part:
        case Text(text):
            return f"<p>{_marked_up(text)}</p>"
        case Caution(text):
            return f'<p class="caution" role="note"><strong>Caution.</strong> {_marked_up(text)}</p>'
        case Commands(lines):
            return f'<pre tabindex="0"><code>{escape(chr(10).join(lines))}</code></pre>'
        case Table():
            return _table(part)
        case Figure():
            return _figure(part)


def _table(table: Table) -> str:
    head = "".join(f'<th scope="col">{escape(cell)}</th>' for cell in table.header)
    rows = "\n".join(
        f"<tr{_row_class(table, number)}>{''.join(f'<td>{escape(cell)}</td>' for cell in row)}</tr>"
        for number, row in enumerate(table.rows)
    )
    return (
        f'<figure class="table"><figcaption>{_marked_up(table.caption)}</figcaption>'
        f'<div class="wide" tabindex="0" role="region" aria-label="{escape(table.caption)}"><table>'
        f"<thead><tr>{head}</tr></thead><tbody>\n{rows}\n</tbody></table></div></figure>"
    )


def _row_class(table: Table, number: int) -> str:
    return ' class="marked"' if number in table.marked else ""


def _figure(figure: Figure) -> str:
    return f"<figure>{_picture(figure)}<figcaption>{_marked_up(figure.caption)}</figcaption></figure>"


def _picture(figure: Figure) -> str:
    if figure.svg:
        drawing = figure.svg[figure.svg.index("<svg") :]
        name = escape(figure.alternative, quote=True)
        named = drawing.replace("<svg", f'<svg role="img" aria-label="{name}"', 1)
        return f'<div class="wide" tabindex="0">{named}</div>'
    data = base64.b64encode(figure.png).decode()
    return f'<img src="data:image/png;base64,{data}" alt="{escape(figure.alternative, quote=True)}">'


def _marked_up(text: str) -> str:
    """Return text with `code` marked."""
    return re.sub(r"`([^`]+)`", r"<code>\1</code>", escape(text, quote=False))
