"""Write jobs/reference.md, the keys of job files as the program knows them."""

from __future__ import annotations

from pathlib import Path

from lattice.job.reference import job_reference

HEAD = """# Keys of a job file

TOML. A key that is unknown, of the wrong type or in conflict with another is refused with file, key, value,
requirement and remedy, before any rank allocates anything. File names are relative to the job file or,
failing that, to the current folder. `lattice solve JOB --set section.key=value` replaces one value.

Written by `.ci/write_reference.py`; change `lattice/job/schema.py` instead.

"""
PAGE = Path(__file__).parent.parent / "jobs" / "reference.md"


if __name__ == "__main__":
    PAGE.write_text(f"{HEAD}{job_reference().strip()}\n", encoding="utf-8")
