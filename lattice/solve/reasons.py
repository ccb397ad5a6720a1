"""What PETSc's convergence reasons mean for the user.

Only numbers that have the same meaning in every supported PETSc are told apart by number.
"""

from __future__ import annotations

CONVERGED, STOPPED, STEP_LIMIT, STALLED = 2, 5, -5, -6

_TEXTS = {
    4: "no step lowers the residual any more",
    -3: "a linear solve failed",
    -4: "the residual is not finite",
    -5: "the largest number of Newton steps is used up",
    -6: "no step lowers the residual any more",
    -9: "the residual grows without bound",
}


def nonlinear_text(reason: int) -> str:
    """Return in words why a Newton solve ended without convergence."""
    return _TEXTS.get(reason, f"PETSc SNES reason {reason}")


def linear_text(reason: int) -> str:
    """Return in words why a linear solve failed."""
    texts = {
        -3: "it reached the largest number of iterations; raise solve.linear_iterations or change the"
        " preconditioner",
        -4: "it diverged",
        -5: "it broke down",
        -9: "its residual is not finite",
        -11: "the preconditioner could not be set up",
    }
    return texts.get(reason, f"PETSc KSP reason {reason}")
