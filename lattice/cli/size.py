"""`lattice size JOB`: memory, time, core hours and files of a job before it is run."""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from lattice.errors import InputError

if TYPE_CHECKING:
    from lattice.batch.site import Site
    from lattice.job.schema import Job
    from lattice.sizing.calibration import Calibration
    from lattice.sizing.figures import Assumptions, Estimate
    from lattice.sizing.knowledge import Knowledge
    from lattice.sizing.layouts import Layout

EPILOG = """\
Sizes every stage the run is expected to make. The LU factors are analysed, not computed, in a process of
their own (seconds; --quick leaves that out); the coarse lattice is found on a small box of the same
spacings. How many steps and linear iterations a run takes is known afterwards only: the counts assumed are
printed, and --steps and --iterations replace them.

Times need a calibration of the machine that is to run the job: `lattice size --calibrate` there, on a
cluster within a job of its own on a compute node with --name SITE. It takes about a minute, and is kept in
~/.config/lattice/calibrations. Without one there is memory only.

The figures are estimates. Try a job in the short queue before a large allocation is spent on it.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.add_argument("job", metavar="JOB", nargs="?", help="a job file")
    parser.add_argument("--site", metavar="SITE", help="name or file of the site; default: this machine")
    parser.add_argument(
        "--ranks", metavar="N[,N...]", type=_ranks, help="rank counts to size; default: those worth a look"
    )
    parser.add_argument("--time", metavar="T", type=_time, help="wall clock of one leg: 1:30:00, 90m")
    parser.add_argument("--steps", metavar="N", type=_count, help="Newton steps on each lattice")
    parser.add_argument("--iterations", metavar="N", type=_count, help="linear iterations of a Newton step")
    parser.add_argument("--damped-steps", metavar="N", type=_count, help="damped steps")
    parser.add_argument(
        "--damped-iterations", metavar="N", type=_count, help="conjugate gradient iterations of a damped step"
    )
    parser.add_argument(
        "--stages",
        metavar="NAME[,NAME...]",
        type=_stages,
        help="damped, newton, refine, if the job does not say",
    )
    parser.add_argument("--quick", action="store_true", help="count only, start nothing")
    parser.add_argument(
        "--exact", action="store_true", help="analyse the LU on the rank count given, which is started here"
    )
    parser.add_argument(
        "--set", metavar="SECTION.KEY=VALUE", action="append", default=[], dest="overrides",
        help="a value that replaces the job file's; may be repeated",
    )  # fmt: skip
    parser.add_argument("--calibrate", action="store_true", help="measure this machine, and keep the figures")
    parser.add_argument(
        "--name", metavar="NAME", help="name of the calibration; default: the site, else the host"
    )
    parser.add_argument("--launcher", metavar="COMMAND", help="the MPI launcher, as for solve")
    parser.add_argument("--json", action="store_true", help="print JSON, for a script")


def _count(text: str) -> int:
    if not text.isdigit() or int(text) < 1:
        raise argparse.ArgumentTypeError(f"must be an integer >= 1, got '{text}'")
    return int(text)


def _ranks(text: str) -> tuple[int, ...]:
    return tuple(_count(part.strip()) for part in text.split(","))


def _time(text: str) -> int:
    from lattice.batch.duration import parse_duration

    try:
        return parse_duration(text)
    except ValueError as error:
        raise argparse.ArgumentTypeError(str(error)) from None


def _stages(text: str) -> tuple[str, ...]:
    from lattice.solve.legs import STAGES

    given = tuple(part.strip() for part in text.split(","))
    wrong = [name for name in given if name not in STAGES]
    if wrong:
        raise argparse.ArgumentTypeError(f"must be of {', '.join(STAGES)}, got '{wrong[0]}'")
    return tuple(name for name in STAGES if name in given)


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code: 0 also where the job does not fit, which is told."""
    if options.calibrate:
        _calibrate(options)
        if options.job is None:
            return 0
    if options.job is None:
        raise InputError("is required; give a job file, or --calibrate", key="JOB")
    if options.exact and (options.ranks is None or len(options.ranks) != 1 or options.quick):
        raise InputError("needs --ranks with one count, and no --quick", key="--exact")
    return _size(options)


def _calibrate(options: argparse.Namespace) -> None:
    from lattice.sizing.calibrate import calibrate
    from lattice.sizing.calibration import calibration_path, save_calibration
    from lattice.sizing.words import calibration_text

    def report(text: str) -> None:
        print(text, file=sys.stderr if options.json else sys.stdout, flush=True)

    counts = options.ranks or ((1, 2) if _cores() > 1 else (1,))
    found = calibrate(counts, _launch(options), report)
    path = calibration_path(_calibration_name(options))
    save_calibration(found, path)
    for note in found.notes:
        print(f"caution: {note}", file=sys.stderr)
    report(f"calibrated in {found.seconds:.0f} s: {calibration_text(found)}")
    report(f"its own measurements fit within {found.error:.0%}; kept in {path}")


def _calibration_name(options: argparse.Namespace) -> str | None:
    """Return the name of the calibration meant: given, the site's, None for this machine's."""
    from lattice.batch.sites import load_site

    name, site = load_site(options.site)
    return options.name or (None if site.scheduler == "local" else name)


def _cores() -> int:
    from lattice.cli.launch import count_cores

    return count_cores()


def _launch(options: argparse.Namespace) -> Any:
    """Return what makes the command line of a program on several ranks, the launcher sought when needed."""
    from lattice.cli.launch import find_launcher, launch_command

    def launch(ranks: int, program: Sequence[str]) -> list[str]:
        if ranks == 1:
            return list(program)
        return launch_command(find_launcher(options.launcher), ranks, program)

    return launch


def _size(options: argparse.Namespace) -> int:
    from lattice.batch.sites import load_site
    from lattice.job.reader import load_job_with_cautions
    from lattice.sizing.figures import Assumptions

    name, site = load_site(options.site)
    job, _ = load_job_with_cautions(options.job, options.overrides)
    assumptions = Assumptions(
        options.steps,
        options.iterations,
        options.damped_steps,
        options.damped_iterations,
        options.stages,
    )
    calibration = _calibration(options)
    knowledge = _knowledge(options, job, assumptions)
    sized = _Sized(options, job, name, site, assumptions, calibration, knowledge)
    if options.json:
        print(json.dumps(sized.record(), indent=1, ensure_ascii=False))
    else:
        print("\n".join(sized.lines()))
        for warning in sized.warnings():
            print(f"caution: {warning}", file=sys.stderr, flush=True)
    return 0


def _calibration(options: argparse.Namespace) -> Calibration | None:
    """Return the calibration named, the site's, or where the site is this machine, the host's."""
    from lattice.sizing.calibration import calibration_path, load_calibration

    name = _calibration_name(options)
    found = load_calibration(calibration_path(name))
    if found is None and options.name:
        raise InputError(
            f"must be a calibration, got '{options.name}'; none is in {calibration_path(name)}", key="--name"
        )
    return found


def _knowledge(options: argparse.Namespace, job: Job, assumptions: Assumptions) -> Knowledge:
    from lattice.sizing.gather import gather
    from lattice.sizing.knowledge import Knowledge

    if options.quick:
        return Knowledge()
    ranks = max(options.ranks or (1,))
    return gather(job, ranks, assumptions, ranks if options.exact else 0, _launch(options))


class _Sized:
    """A job sized on the rank counts asked for, or those worth a look."""

    def __init__(
        self,
        options: argparse.Namespace,
        job: Job,
        site_name: str,
        site: Site,
        assumptions: Assumptions,
        calibration: Calibration | None,
        knowledge: Knowledge,
    ) -> None:
        from lattice.job.ranks import check_ranks
        from lattice.sizing.layouts import candidates, cheapest, compare

        self.options, self.job, self.site, self.site_name = options, job, site, site_name
        self.assumptions, self.calibration, self.knowledge = assumptions, calibration, knowledge
        for count in options.ranks or ():
            check_ranks(job, count)
        counts = options.ranks or candidates(self._most(), site)
        self.layouts: list[Layout] = compare(self._estimate, counts, site, _own_memory_gb(site))
        self.best = cheapest(self.layouts)
        self.shown = self.best or self.layouts[-1]

    def _most(self) -> int:
        from lattice.sizing.estimate import lattices_of
        from lattice.sizing.knowledge import Counter

        counter = Counter(self.job)
        return min(
            counter.problem(lattice).most_ranks for _, lattice in lattices_of(self.job, self.assumptions)
        )

    def _estimate(self, ranks: int) -> Estimate:
        from lattice.sizing.estimate import estimate

        return estimate(self.job, ranks, self.calibration, self.knowledge, self.assumptions)

    def warnings(self) -> list[str]:
        """Return what to know before an allocation is spent."""
        from lattice.sizing.layouts import warnings_of

        ranks = self.shown.estimate.ranks
        half = self._half(ranks)
        seconds = self.options.time or self.site.time
        found = [*self.knowledge.problems]
        found += warnings_of(self.shown, half, self.site, seconds, self.calibration)
        if self.best is None:
            found.append("no layout that was looked at fits the site; see the table")
        return found

    def _half(self, ranks: int) -> Estimate | None:
        if ranks < 2:
            return None
        try:
            return self._estimate(ranks // 2)
        except InputError:
            return None

    def lines(self) -> list[str]:
        """Return the report."""
        from lattice.sizing.words import describe, table

        lines = []
        if len(self.layouts) > 1:
            lines += [*table(self.layouts, self.best), ""]
        name = self.site_name if self.options.site else "this machine"
        lines += describe(self.shown, self.calibration, name)
        if self.knowledge.coarse is not None:
            lines.append(f"coarse lattice: {self.knowledge.coarse.origin}")
        lines.append("assumed: " + "; ".join(self.shown.estimate.assumptions))
        return lines

    def record(self) -> dict[str, Any]:
        """Return all of it as plain data."""
        calibration = self.calibration
        return {
            "job": str(Path(self.options.job)),
            "site": self.site_name,
            "layouts": [layout.record() for layout in self.layouts],
            "cheapest_ranks": None if self.best is None else self.best.estimate.ranks,
            "shown_ranks": self.shown.estimate.ranks,
            "warnings": self.warnings(),
            "calibration": None
            if calibration is None
            else {"host": calibration.host, "date": calibration.date, "error": calibration.error},
        }


def _own_memory_gb(site: Site) -> float | None:
    """Return the memory of this machine, where it is the site."""
    import os

    if site.scheduler != "local":
        return None
    try:
        return os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") / 1e9
    except (ValueError, OSError):
        return None
