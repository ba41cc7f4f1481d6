"""Which solver takes a convex program."""

from __future__ import annotations

from lmpgap.dispatch.clarabel_solver import solve_conic
from lmpgap.dispatch.conic import ConicProgram, ConicSolution
from lmpgap.dispatch.highs_solver import solve_linear
from lmpgap.tolerances import Tolerances


def solve_program(program: ConicProgram, tolerances: Tolerances) -> tuple[ConicSolution, tuple[str, ...]]:
    """Solve with the solver that suits the program, and say what had to be done.

    A linear program goes to HiGHS, whose answer is a vertex: prices at a degenerate optimum are then those of
    one basis and the same on every machine. Everything else goes to Clarabel.
    """
    if program.is_linear:
        return solve_linear(program), ()
    return solve_conic(program, tolerances)
