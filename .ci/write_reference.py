"""Put the job reference, as the program prints it, into README between its two marks."""

from __future__ import annotations

import sys
from pathlib import Path

from lattice.job.reference import job_reference

BEGIN, END = "<!-- job reference -->\n", "<!-- end of job reference -->\n"


def main() -> int:
    """Rewrite README; return 1 if its marks are missing."""
    readme = Path(__file__).parent.parent / "README.md"
    before, begin, rest = readme.read_text(encoding="utf-8").partition(BEGIN)
    _, end, after = rest.partition(END)
    if not (begin and end):
        print(f"{readme}: needs the lines {BEGIN.strip()} and {END.strip()}", file=sys.stderr)
        return 1
    readme.write_text(f"{before}{begin}{job_reference().strip()}\n{end}{after}", encoding="utf-8")
    return 0


if __name__ == "__main__":
    sys.exit(main())
