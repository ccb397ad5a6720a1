"""`lattice report RUN`: one page about a run."""

from __future__ import annotations

import argparse
from pathlib import Path

from lattice.batch.codes import CONVERGED
from lattice.errors import InputError

EPILOG = """\
Writes report.html, one page that needs no other file and no network, into the run's folder; --markdown writes
report.md and its figures instead. Reports of scaling studies: lattice study FILE --report.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.add_argument("run", metavar="RUN", help="a run's folder")
    parser.add_argument("--out", metavar="FILE", help="the page's file, instead of report.html in the folder")
    parser.add_argument(
        "--markdown", action="store_true", help="write Markdown, its figures in figures/ beside it"
    )


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code."""
    from lattice.cli.paths import writable_path
    from lattice.report.markdown import figure_file, to_markdown
    from lattice.report.page import to_html
    from lattice.report.run import run_document
    from lattice.store.replacement import write_text_whole

    folder = Path(options.run)
    if not folder.is_dir():
        raise InputError("must be the folder of a run; check the path", file=options.run)
    document = run_document(folder)
    out = writable_path(Path(options.out or folder / ("report.md" if options.markdown else "report.html")))
    if options.markdown:
        figures = out.parent / "figures"
        figures.mkdir(exist_ok=True)
        for figure in document.figures:
            (figures / figure_file(figure)).write_bytes(figure.png or figure.svg.encode())
        write_text_whole(out, to_markdown(document))
    else:
        write_text_whole(out, to_html(document))
    print(f"report: {out}")
    return CONVERGED
