"""System: unknown scalars, conditions, residual and Jacobian of the bordered problem."""
