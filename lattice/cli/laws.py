"""`lattice laws [NAME]`: list the laws, or describe one."""

from __future__ import annotations

import argparse

from lattice.errors import InputError


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.add_argument("name", metavar="NAME", nargs="?", help="a law to describe in full")


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code."""
    from lattice.laws.catalogue import law_names, load_law
    from lattice.laws.describe import describe_law, list_laws

    if options.name is None:
        print(list_laws())
        return 0
    _check_name(options.name, law_names())
    print(describe_law(load_law(options.name)))
    return 0


def _check_name(name: str, known: list[str]) -> None:
    from lattice.job.problems import did_you_mean

    if name not in known:
        raise InputError(
            f"must be a shipped law, got '{name}'{did_you_mean(name, known)}; `lattice laws` lists them",
            key="NAME",
        )
