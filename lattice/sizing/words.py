"""An estimate in words and columns."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import UTC, datetime

from lattice.batch.duration import format_duration
from lattice.sizing.calibration import Calibration
from lattice.sizing.figures import LegEstimate
from lattice.sizing.layouts import MEMORY_ERROR, TIME_ERROR, Layout

OLD_DAYS = 180
NO_CALIBRATION = (
    "no calibration of {name}: memory only; `lattice size --calibrate` there takes about a minute and"
    " gives times"
)


def describe(layout: Layout, calibration: Calibration | None, name: str) -> list[str]:
    """Return the lines of one layout: legs, memory by part, time, files."""
    estimate = layout.estimate
    lines = [_ranks_text(layout)]
    for leg in estimate.legs:
        lines += ["", *_leg_lines(leg)]
    lines += ["", f"memory: {_mb(estimate.rank_mb)} on the fullest rank, {_mb(estimate.all_ranks_mb)} in all"]
    rough = any(leg.lu_origin == "law" for leg in estimate.legs)
    lines[-1] += " (its LU good to a factor of two)" if rough else f" (within {MEMORY_ERROR:.0%})"
    lines += _time_lines(layout, calibration, name)
    lines.append(
        f"files: state {_mb(estimate.state_mb)}, at most {_mb(estimate.scratch_mb)} in the run's folder"
    )
    return lines


def _ranks_text(layout: Layout) -> str:
    where = f" on {layout.nodes} node(s)" if layout.nodes else ""
    queue = f", queue {layout.queue}" if layout.queue else ""
    return f"{layout.estimate.ranks} rank(s){where}{queue}"


def _leg_lines(leg: LegEstimate) -> list[str]:
    nodes = " x ".join(str(n) for n in leg.nodes if n > 1)
    coarse = f", coarse lattice {' x '.join(str(n) for n in leg.coarse if n > 1)}" if leg.coarse else ""
    lines = [f"{leg.stage}: {leg.unknowns} unknowns on {nodes} nodes, {leg.preconditioner}{coarse}"]
    parts = ", ".join(f"{name} {mb:.3g}" for name, mb in leg.memory_mb.items())
    lines.append(f"  memory a rank, MB: {parts}; sum {leg.rank_mb:.0f}")
    if leg.lu_origin not in ("analysis", "none"):
        lines.append(f"  LU: {_ORIGINS.get(leg.lu_origin, leg.lu_origin)}")
    if leg.seconds is not None and leg.one_step is not None:
        parts = ", ".join(f"{name} {_seconds(s)}" for name, s in leg.step_seconds.items() if s > 0)
        lines.append(f"  a step of {leg.iterations} iterations: {_seconds(leg.one_step)} ({parts})")
        lines.append(f"  {leg.steps} steps: {_seconds(leg.seconds)}")
    else:
        lines.append(f"  {leg.steps} steps of {leg.iterations} iterations assumed")
    return lines


_ORIGINS = {
    "law": "size by growth laws alone, good to a factor of two; without --quick it is analysed",
    "growth": "size grown from analyses of two smaller lattices of this shape",
}


def _time_lines(layout: Layout, calibration: Calibration | None, name: str) -> list[str]:
    estimate = layout.estimate
    if calibration is None or estimate.seconds is None:
        return [NO_CALIBRATION.format(name=name)]
    start = (estimate.start_up_seconds or 0.0) + (estimate.start_seconds or 0.0)
    line = (
        f"time: {_seconds(estimate.seconds)}, of it start {_seconds(start)};"
        f" {layout.core_hours:.3g} core hours (within {TIME_ERROR:.0%} where the steps are as assumed)"
    )
    return [line, f"calibration: {calibration_text(calibration)}"]


def calibration_text(calibration: Calibration) -> str:
    """Return in words what a calibration is of, and a word where it is old."""
    counts = ", ".join(str(speeds.ranks) for speeds in calibration.speeds)
    text = f"{calibration.host}, {calibration.processor}, {calibration.date[:10]}, on {counts} rank(s)"
    age = (datetime.now(UTC) - datetime.fromisoformat(calibration.date)).days
    return f"{text}; {age} days old: make it anew" if age > OLD_DAYS else text


def table(layouts: Sequence[Layout], best: Layout | None) -> list[str]:
    """Return the comparison of layouts, one line each, the cheapest marked."""
    lines = [
        f"{'ranks':>6}  {'nodes':>5}  {'MB a rank':>9}  {'a step':>9}  {'in all':>9}  {'core h':>8}  fits"
    ]
    for layout in layouts:
        estimate = layout.estimate
        step, total = estimate.longest_step, estimate.seconds
        hours = "-" if layout.core_hours is None else f"{layout.core_hours:.3g}"
        word = "yes" if layout.fits else f"no: {layout.obstacles[0]}"
        mark = "  <- cheapest" if layout is best else ""
        lines.append(
            f"{estimate.ranks:>6}  {layout.nodes:>5}  {estimate.rank_mb:>9.0f}  {_seconds(step):>9}"
            f"  {_seconds(total):>9}  {hours:>8}  {word}{mark}"
        )
    return lines


def _seconds(seconds: float | None) -> str:
    """Return seconds in few characters."""
    if seconds is None:
        return "-"
    if seconds >= 600:
        return format_duration(seconds)
    return f"{seconds:.3g} s"


def _mb(megabytes: float) -> str:
    return f"{megabytes / 1e3:.3g} GB" if megabytes >= 1000 else f"{megabytes:.3g} MB"
