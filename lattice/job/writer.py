"""Writes a resolved job as TOML, with all defaults."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from lattice.job.schema import Job


def job_to_toml(job: Job) -> str:
    """Return the job as TOML text that `load_job` reads back to the same job.

    Parameters
    ----------
    job : Job
        As `load_job` returns it.

    Returns
    -------
    str
        Without the sections of preconditioners that are not chosen.
    """
    import tomli_w

    tables = job.model_dump(exclude_none=True)
    if job.solve.preconditioner == "direct":
        del tables["solve"]["patches"], tables["solve"]["coarse"]
    elif job.solve.preconditioner == "patches":
        del tables["solve"]["coarse"]
    return tomli_w.dumps(_plain(tables))


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _plain(item) for key, item in value.items()}
    if isinstance(value, tuple):
        return [_plain(item) for item in value]
    return value
