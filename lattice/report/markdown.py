"""A report as Markdown, for pasting into a proposal; its figures are files beside it."""

from __future__ import annotations

from lattice.report.document import Caution, Chapter, Commands, Document, Figure, Part, Table, Text


def to_markdown(document: Document, folder: str = "figures") -> str:
    """Return the Markdown of a report whose figures lie in a folder beside it."""
    chapters = [_chapter(chapter, folder) for chapter in document.chapters]
    parts = [f"# {document.title}", document.lead, *chapters, f"*{document.foot}*" if document.foot else ""]
    return "\n\n".join(part for part in parts if part) + "\n"


def figure_file(figure: Figure) -> str:
    """Return the name of a figure's file."""
    return f"{figure.name}.{'svg' if figure.svg else 'png'}"


def _chapter(chapter: Chapter, folder: str) -> str:
    parts = [f"{'#' * chapter.level} {chapter.title}", *(_part(part, folder) for part in chapter.parts)]
    return "\n\n".join(parts)


def _part(part: Part, folder: str) -> str:
    match part:
        case Text(text):
            return text
        case Caution(text):
            return f"> **Caution.** {text}"
        case Commands(lines):
            return "\n".join(f"    {line}" for line in lines)
        case Table():
            return _table(part)
        case Figure():
            return f"![{part.alternative}]({folder}/{figure_file(part)})\n\n*{part.caption}*"


def _table(table: Table) -> str:
    lines = [_row(table.header), _row(["---", *["---:"] * (len(table.header) - 1)])]
    lines += [
        _row([f"*{cell}*" if number in table.marked and cell else cell for cell in row])
        for number, row in enumerate(table.rows)
    ]
    return f"**{table.caption}**\n\n" + "\n".join(lines)


def _row(cells: object) -> str:
    return "| " + " | ".join(str(cell).replace("|", "\\|") for cell in cells) + " |"  # type: ignore[attr-defined]
