"""Only what PETSc 3.18 and 3.26, NumPy 1.24 and 2 have in common is used.

The PETSc lists are the differences of `dir()` between petsc4py 3.18.5 and 3.26.1 for the classes a
solver needs; the NumPy list is from the release notes of NumPy 2.0 and 2.1 ("New functions").
"""

from __future__ import annotations

import ast
import re
from pathlib import Path

import pytest

from tests.sources import ROOT, python_files, tree

REMOVED_BY_3_26 = {
    "getVecs": "createVecs",
    "PtAP": "ptap",
    "cancelMonitor": "monitorCancel",
    "getAppCtx": "getApplicationContext",
    "setAppCtx": "setApplicationContext",
    "setMaxLinearSolveFailures": "setMaxKSPFailures",
    "SchurFactType": "FieldSplitSchurFactType",
    "createGlobalVector": "createGlobalVec",
    "createLocalVector": "createLocalVec",
    "createMatrix": "createMat",
    "getSection": "getLocalSection",
    "scatterBegin": "begin",
    "scatterEnd": "end",
    "DIVERGED_FNORM_NAN": "the number -4",
}
NOT_YET_IN_3_18 = {
    "getFailedReason": "the reason of the solver",
    "setFailedReason": "an infinite result",
    "getLineSearch": "the option snes_linesearch_type",
    "setLineSearch": "the option snes_linesearch_type",
    "addConvergenceTest": "setConvergenceTest",
    "setPreallocationCOO": "setPreallocationNNZ",
    "setPreSolve": "a Python preconditioner",
    "setPostSolve": "a Python preconditioner",
    "is_converged": "reason > 0",
    "is_diverged": "reason < 0",
    "DIVERGED_FUNCTION_NANORINF": "the number -4",
}
# Ordinary words: wrong only on a solver, whose variable is called by its usual name.
WRONG_ON_A_SOLVER = {
    "converged": "reason > 0",
    "diverged": "reason < 0",
    "iterating": "reason == 0",
}
SOLVER = re.compile(r"(snes|ksp)$", re.IGNORECASE)
NOT_YET_IN_NUMPY_1_24 = {
    "trapezoid", "concat", "permute_dims", "vecdot", "matvec", "vecmat", "matrix_transpose", "unstack",
    "cumulative_sum", "cumulative_prod", "isdtype", "astype", "bool", "long", "ulong", "unique_values",
    "unique_counts", "unique_inverse", "unique_all", "bitwise_count", "acos", "asin", "atan", "atan2", "pow",
}  # fmt: skip


def findings(source: ast.AST) -> list[str]:
    """Return what to write instead, for each use of a name that one of the versions lacks."""
    found = []
    for node in ast.walk(source):
        if isinstance(node, ast.Attribute):
            instead = _instead(node)
            if instead:
                found.append(f"line {node.lineno}: .{node.attr} is not in all versions, use {instead}")
    return found


def _instead(node: ast.Attribute) -> str:
    holder = ast.unparse(node.value)
    if SOLVER.search(holder) and node.attr in WRONG_ON_A_SOLVER:
        return WRONG_ON_A_SOLVER[node.attr]
    if holder in {"np", "numpy"} and node.attr in NOT_YET_IN_NUMPY_1_24:
        return "its older name"
    return {**REMOVED_BY_3_26, **NOT_YET_IN_3_18}.get(node.attr, "")


@pytest.mark.parametrize("path", python_files(), ids=lambda path: str(path.relative_to(ROOT)))
def test_only_names_of_all_versions_are_used(path: Path) -> None:
    assert findings(tree(path)) == []


@pytest.mark.parametrize(
    "line",
    ["A.getVecs()", "self.snes.converged", "pc.getFailedReason()", "np.trapezoid(y)", "ksp.is_converged"],
)
def test_a_name_one_version_lacks_is_found(line: str) -> None:
    assert len(findings(ast.parse(line))) == 1


@pytest.mark.parametrize("line", ["outcome.converged", "A.createVecs()", "np.float64(1)", "ksp.reason > 0"])
def test_a_name_of_all_versions_is_accepted(line: str) -> None:
    assert findings(ast.parse(line)) == []
