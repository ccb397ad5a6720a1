"""Layouts of a job on a site: what fits, what is cheapest, and what would waste an allocation."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass
from typing import Any

from lattice.batch.duration import format_duration
from lattice.batch.site import Queue, Site
from lattice.errors import InputError
from lattice.sizing.calibration import Calibration
from lattice.sizing.estimate import LEAST_UNKNOWNS
from lattice.sizing.figures import Estimate

MEMORY_ERROR = 0.2
"""Stated error of the memory, as a share."""
TIME_ERROR = 0.35
"""Stated error of the time on a calibrated machine, for the counts of steps that are assumed."""
USEFUL = 0.75
"""Ranks are useful while twice as many bring the time below this share."""
MOST_CANDIDATES = 14


@dataclass(frozen=True)
class Layout:
    """A job on a number of ranks of a site.

    Parameters
    ----------
    estimate : Estimate
    nodes : int
    cores : int
        That are paid for.
    queue : str
        The first of the site's that takes it, empty where there is none, or none is named.
    core_hours : float or None
    obstacles : tuple of str
        Why it does not fit; empty where it does.
    """

    estimate: Estimate
    nodes: int
    cores: int
    queue: str
    core_hours: float | None
    obstacles: tuple[str, ...]

    @property
    def fits(self) -> bool:
        """Whether the site can take it."""
        return not self.obstacles

    def record(self) -> dict[str, Any]:
        """Return it as plain data, for JSON."""
        return asdict(self) | {"fits": self.fits}


def lay_out(estimate: Estimate, site: Site, memory_gb: float | None) -> Layout:
    """Return a job's estimate as it would run on a site.

    Parameters
    ----------
    estimate : Estimate
    site : Site
    memory_gb : float or None
        Of one node, where the site does not say.
    """
    ranks = estimate.ranks
    nodes, cores = site.nodes(ranks), site.cores(ranks)
    obstacles = []
    room = site.memory_per_node_gb or memory_gb
    each = -(-ranks // nodes)
    needed = estimate.rank_mb * each / 1e3
    if room is not None and needed > room:
        obstacles.append(
            f"{each} rank(s) on a node need {needed:.3g} GB, a node has {room:.3g} GB; use more ranks, or"
            " fewer on a node"
        )
    queue, complaint = _queue(estimate, site, nodes)
    if complaint:
        obstacles.append(complaint)
    hours = None if estimate.seconds is None else cores * estimate.seconds / 3600
    return Layout(estimate, nodes, cores, queue, hours, tuple(obstacles))


def _queue(estimate: Estimate, site: Site, nodes: int) -> tuple[str, str]:
    """Return the first queue that takes an estimate, and otherwise why none does."""
    why = []
    for name, queue in site.queues.items():
        complaint = _too_small(queue, estimate, nodes)
        if not complaint:
            return name, ""
        why.append(f"queue {name} takes at most {complaint}")
    return "", "; ".join(why)


def _too_small(queue: Queue, estimate: Estimate, nodes: int) -> str:
    if queue.max_ranks is not None and estimate.ranks > queue.max_ranks:
        return f"{queue.max_ranks} ranks"
    if queue.max_nodes is not None and nodes > queue.max_nodes:
        return f"{queue.max_nodes} nodes"
    step = estimate.longest_step
    if queue.max_time is not None and step is not None and step > queue.max_time:
        return f"{format_duration(queue.max_time)}, less than one step of {format_duration(step)}"
    return ""


def candidates(most: int, site: Site) -> list[int]:
    """Return rank counts worth a look: powers of two and full nodes, up to what lattice and site allow.

    Examples
    --------
    >>> from lattice.batch.site import LOCAL
    >>> candidates(10, LOCAL.model_copy(update={"cores_per_node": 3}))
    [1, 2, 3, 4, 6, 8, 9]
    """
    node = site.ranks_per_node or site.cores_per_node or 0
    limits = [_most_ranks(queue, node) for queue in site.queues.values()]
    largest = min(most, max(limits, default=most))
    if site.scheduler == "local" and not site.cores_per_node:
        largest = min(largest, _own_cores())
    counts = {2**k for k in range(31)} | ({node * k for k in range(1, 65)} if node else set())
    fitting = sorted(count for count in counts if count <= largest)
    if len(fitting) <= MOST_CANDIDATES:
        return fitting
    return sorted(
        {fitting[round(k * (len(fitting) - 1) / (MOST_CANDIDATES - 1))] for k in range(MOST_CANDIDATES)}
    )


def _most_ranks(queue: Queue, node: int) -> int:
    nodes = queue.max_nodes * node if queue.max_nodes is not None and node else 2**30
    return min(nodes, queue.max_ranks or 2**30)


def _own_cores() -> int:
    import os

    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def compare(
    make: Callable[[int], Estimate], counts: Sequence[int], site: Site, room: float | None
) -> list[Layout]:
    """Return the layouts of a job on each rank count that can share its lattice."""
    found = []
    for ranks in counts:
        try:
            found.append(lay_out(make(ranks), site, room))
        except InputError:
            continue  # its blocks would be narrower than their halo
    return found


def cheapest(layouts: Sequence[Layout]) -> Layout | None:
    """Return the layout that fits with the fewest core hours; without times, the fewest ranks that fit."""
    fitting = [layout for layout in layouts if layout.fits]
    if not fitting:
        return None
    if any(layout.core_hours is None for layout in fitting):
        return min(fitting, key=lambda layout: layout.estimate.ranks)
    return min(fitting, key=lambda layout: (layout.core_hours or 0.0, layout.estimate.ranks))


def warnings_of(
    layout: Layout, half: Estimate | None, site: Site, seconds: int | None, calibration: Calibration | None
) -> list[str]:
    """Return what to know before an allocation is spent.

    Parameters
    ----------
    layout : Layout
    half : Estimate or None
        On half as many ranks.
    site : Site
    seconds : int or None
        Wall clock of one leg.
    calibration : Calibration or None
    """
    found = [f"does not fit: {text}" for text in layout.obstacles]
    estimate, ranks = layout.estimate, layout.estimate.ranks
    most = max(leg.unknowns for leg in estimate.legs)
    if ranks > 1 and most / ranks < LEAST_UNKNOWNS:
        found.append(
            f"more ranks than useful: {most // ranks} unknowns a rank, below {LEAST_UNKNOWNS}; use"
            f" {max(1, most // LEAST_UNKNOWNS)} or fewer"
        )
    elif half is not None and estimate.seconds is not None and half.seconds is not None:
        share = estimate.seconds / half.seconds
        if share > USEFUL:
            found.append(
                f"more ranks than useful: {ranks} ranks take {share:.0%} of the time of {half.ranks}, and"
                f" {ranks / half.ranks * share:.2g} times the core hours"
            )
    found += _short_of_time(estimate, site, seconds)
    if calibration is not None and ranks > max(s.ranks for s in calibration.speeds):
        measured = ", ".join(str(s.ranks) for s in calibration.speeds)
        found.append(f"times on {ranks} ranks are extrapolated from {measured}: treat them as a guide")
    return found


def _short_of_time(estimate: Estimate, site: Site, seconds: int | None) -> list[str]:
    step = estimate.longest_step
    if seconds is None or step is None:
        return []
    usable = seconds - min(site.warning, seconds // 4)
    first = (estimate.start_up_seconds or 0.0) + (estimate.start_seconds or 0.0) + step
    if first * (1.0 + TIME_ERROR) > usable:
        text = (
            f"the wall clock of {format_duration(seconds)} is too short for one step: of the"
            f" {format_duration(usable)} before the warning, start and one step may take"
            f" {format_duration(first * (1 + TIME_ERROR))}; ask for more time, or use more ranks"
        )
        return [text]
    total = estimate.seconds or 0.0
    if total > usable:
        legs = -(-int(total) // max(1, int(usable - first + step)))
        most = f", the site's limit is {site.legs}" if legs > site.legs else ""
        return [f"about {legs} legs of {format_duration(seconds)} are needed{most}"]
    return []
