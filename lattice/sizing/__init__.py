"""Sizing: memory, time and core hours of a job before it is run.

Public for scripts and studies: `estimate` (a whole job), `Problem` and `problem_of` (the counts of a law on
a lattice), `Factors` and `growth` (LU), `memory_parts` and `step_seconds` (the cost model), `Calibration`,
`load_calibration` and `save_calibration` (what a machine was measured to do).
"""
