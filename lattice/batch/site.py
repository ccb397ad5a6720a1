"""What is known of a cluster: scheduler, nodes, queues and what a job must load; a TOML file each."""

from __future__ import annotations

import re
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BeforeValidator, ConfigDict, Field, model_validator

from lattice.batch.duration import parse_duration
from lattice.job.schema import Section


def one_line(text: str) -> str:
    """Return a text that stands on one line of a script; anything else could start a line of its own."""
    if not text.isprintable():
        raise ValueError("must be one line of printable text")
    return text


def _directive(text: str) -> str:
    if not text.startswith("-"):
        raise ValueError(f"must start with a dash, as in '--constraint=...' or '-l ...', got '{text}'")
    return one_line(text)


def _variable(text: str) -> str:
    if not re.fullmatch(r"[A-Za-z_][A-Za-z0-9_]*", text):
        raise ValueError(f"must be the name of an environment variable, got '{text}'")
    return text


def _queue_name(text: str) -> str:
    if not re.fullmatch(r"[A-Za-z0-9_][A-Za-z0-9_.@-]*", text):
        raise ValueError(f"must be a queue's or partition's name, got '{text}'")
    return text


def _seconds(value: Any) -> Any:
    return parse_duration(value) if isinstance(value, str) else value


Line = Annotated[str, Field(min_length=1), AfterValidator(one_line)]
Directive = Annotated[str, AfterValidator(_directive)]
Variable = Annotated[str, AfterValidator(_variable)]
QueueName = Annotated[str, AfterValidator(_queue_name)]
Seconds = Annotated[int, BeforeValidator(_seconds), Field(ge=1)]
Count = Annotated[int, Field(ge=1)]
Positive = Annotated[float, Field(gt=0)]


class Queue(Section):
    """A queue or partition and its limits."""

    max_time: Seconds | None = Field(None, description="longest wall clock of one job there")
    max_nodes: Count | None = Field(None, description="most nodes of one job there")
    max_ranks: Count | None = Field(None, description="most ranks of one job there")


class MachineNumbers(Section):
    """What predictions of a scaling study need to know of a machine; what is left out is as measured here."""

    latency_us: Positive | None = Field(None, description="time of an empty message between nodes, us")
    link_gb_s: Positive | None = Field(None, description="bandwidth between two ranks on two nodes, GB/s")
    rank_memory_gb_s: Positive | None = Field(
        None, description="memory bandwidth of a node over its ranks, GB/s (STREAM triad)"
    )


class Site(Section):
    """A cluster, or this machine."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True, allow_inf_nan=False)

    scheduler: Literal["slurm", "pbs", "local"] = Field(description="what runs the jobs")
    title: Line | None = Field(None, description="what the site is, for people")
    launcher: Line | None = Field(None, description="what starts the ranks, with options; else mpiexec")
    cores_per_node: Count | None = Field(None, description="cores of one node; needed but on `local`")
    ranks_per_node: Count | None = Field(None, description="ranks on one node; else one per core")
    memory_per_node_gb: Positive | None = Field(None, description="memory of one node, GB")
    whole_nodes: bool = Field(False, description="whether jobs get, and pay for, whole nodes")
    queues: dict[QueueName, Queue] = Field({}, description="queues or partitions, the preferred first")
    account: Line | None = Field(None, description="account or project that pays")
    time: Seconds | None = Field(None, description="wall clock of a job unless --time says otherwise")
    warning: Seconds = Field(300, description="time before the end at which a run is told to stop")
    legs: Count = Field(5, description="most jobs one run may use, one after another")
    chain: Literal["submit", "requeue"] = Field(
        "submit", description="how a run goes on after its wall clock: a new job, or the same one again"
    )
    concurrent: Count = Field(4, description="members of a study that run at once")
    confirm_core_hours: Positive = Field(100.0, description="core hours from which submitting asks first")
    scratch: Line | None = Field(None, description="folder for run folders; ~ and variables are filled in")
    python: Line | None = Field(None, description="Python on the nodes; else the one that submits")
    modules: tuple[Line, ...] = Field((), description="modules to load")
    activate: Line | None = Field(None, description="file to source, such as a virtual environment's")
    environment: dict[Variable, Line] = Field({}, description="variables to set")
    directives: tuple[Directive, ...] = Field((), description="further options for the scheduler, as typed")
    machine: MachineNumbers | None = Field(None, description="numbers for the predictions of `lattice study`")

    @model_validator(mode="after")
    def _judge(self) -> Site:
        if self.scheduler != "local" and self.cores_per_node is None:
            raise ValueError(f"cores_per_node is required for scheduler = '{self.scheduler}'; add it")
        if self.ranks_per_node and self.cores_per_node and self.ranks_per_node > self.cores_per_node:
            raise ValueError(
                f"ranks_per_node must be <= cores_per_node = {self.cores_per_node}, got {self.ranks_per_node}"
            )
        if self.chain == "requeue" and self.scheduler != "slurm":
            raise ValueError("chain = 'requeue' needs scheduler = 'slurm'; use chain = 'submit'")
        return self

    def nodes(self, ranks: int) -> int:
        """Return the nodes that a number of ranks needs."""
        each = self.ranks_per_node or self.cores_per_node
        return 1 if each is None else -(-ranks // each)

    def cores(self, ranks: int) -> int:
        """Return the cores a job pays for."""
        if self.whole_nodes and self.cores_per_node is not None:
            return self.nodes(ranks) * self.cores_per_node
        return ranks


LOCAL = Site(scheduler="local", title="this machine, in the background")
"""The site that is meant where none is named."""
