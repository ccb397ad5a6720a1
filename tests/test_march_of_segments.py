"""The march of segments against long states, for which one march over the period says nothing."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from mpi4py import MPI

from lattice.check.marching import march_check, single_march
from lattice.check.subject import open_subject
from tests.checking import FILM, odd_film, store

IN_TIME, IN_SPACE = 20, 6
DISTURBANCE = 1e-10
"""Of every value: what a solve to such a residual may leave, and all that breaks the repeats."""


@pytest.fixture(scope="module")
def repeated(tmp_path_factory):
    """Store the film state of nu = 0.127 (see test_certificates) and the same many times in time and space."""
    folder = tmp_path_factory.mktemp("repeated")
    lattice, state = odd_film(17.631043132046, 36, 28)
    small = store(folder / "small.h5", FILM, lattice, state, ("period", "drift_x"))
    large = replace(
        state,
        field=np.tile(state.field, (IN_TIME, 1, IN_SPACE, 1)),
        values={
            **state.values,
            "period": IN_TIME * state.values["period"],
            "length_x": IN_SPACE * state.values["length_x"],
        },
    )
    noise = np.random.default_rng(0).standard_normal(large.field.shape)
    large = replace(large, field=large.field + DISTURBANCE * noise)
    wide = replace(lattice, nt=IN_TIME * lattice.nt, nx=IN_SPACE * lattice.nx)
    return small, store(folder / "large.h5", FILM, wide, large, ("period", "drift_x"))


@pytest.mark.long
def test_segments_agree_where_one_march_is_off_by_order_one(repeated):
    small, large = (open_subject(path, MPI.COMM_SELF) for path in repeated)
    assert min(large.values["period"], large.values["length_x"]) > 100.0
    segments, whole = march_check(large), single_march(large)
    print(f"segments {segments.largest:.2e}, one march {whole:.2e}")
    # The same slices follow one another as in the small state; only how the segments are cut may differ.
    assert segments.largest == pytest.approx(march_check(small).largest, rel=0.5)
    assert segments.largest < 5e-3
    assert segments.largest_growth < 10.0
    assert segments.marcher_error < 0.05 * segments.largest
    # Long and wide, the state is unstable in many ways: what is left of the solve has grown beyond all.
    assert whole > 0.5
    for subject in (small, large):
        subject.destroy()
