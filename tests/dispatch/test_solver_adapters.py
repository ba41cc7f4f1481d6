"""Both solvers on programs whose primal and dual solutions are known, and their outcomes."""

from __future__ import annotations

from dataclasses import dataclass, replace

import clarabel
import highspy
import numpy as np
import pytest
from scipy import sparse

from lmpgap.dispatch import clarabel_solver, highs_solver
from lmpgap.dispatch.conic import ConicProgram, ConicSolution, residuals, stationarity_system
from lmpgap.dispatch.program_solver import solve_program
from lmpgap.dispatch.result import SolveStatus
from lmpgap.errors import LmpgapError
from lmpgap.tolerances import DEFAULT_TOLERANCES

INF = np.inf


def program(
    linear: list[float],
    *,
    quadratic: list[float] | None = None,
    equality: tuple[list[list[float]], list[float]] | None = None,
    inequality: tuple[list[list[float]], list[float]] | None = None,
    lower: list[float] | None = None,
    upper: list[float] | None = None,
    cone: tuple[list[list[float]], list[float], list[int]] | None = None,
) -> ConicProgram:
    n = len(linear)

    def block(rows: list[list[float]] | None) -> sparse.csr_array:
        return sparse.csr_array((0, n)) if rows is None else sparse.csr_array(np.array(rows, dtype=float))

    return ConicProgram(
        linear=np.array(linear, dtype=float),
        quadratic=np.zeros(n) if quadratic is None else np.array(quadratic, dtype=float),
        constant=0.0,
        equality=block(equality[0] if equality else None),
        equality_rhs=np.array(equality[1] if equality else [], dtype=float),
        inequality=block(inequality[0] if inequality else None),
        inequality_rhs=np.array(inequality[1] if inequality else [], dtype=float),
        lower=np.full(n, -INF) if lower is None else np.array(lower, dtype=float),
        upper=np.full(n, INF) if upper is None else np.array(upper, dtype=float),
        cone=block(cone[0] if cone else None),
        cone_rhs=np.array(cone[1] if cone else [], dtype=float),
        cone_sizes=np.array(cone[2] if cone else [], dtype=np.int64),
    )


@dataclass(frozen=True)
class Known:
    """A program with its solution and multipliers in the project's signs, worked out by hand."""

    program: ConicProgram
    x: list[float]
    y: list[float]
    z: list[float]
    lower: list[float]
    upper: list[float]
    u: list[float]
    objective: float


# minimise 10 a + 30 b, a + b = 100, a <= 60: the equation is worth 30, the limit 20
DISPATCH = Known(
    program([10, 30], equality=([[1, 1]], [100]), inequality=([[1, 0]], [60]), lower=[0, 0], upper=[INF, INF]),
    x=[60, 40],
    y=[30],
    z=[20],
    lower=[0, 0],
    upper=[0, 0],
    u=[],
    objective=1800,
)
# the same with the limit as a bound, and a third unit too dear to run
BOUNDS = Known(
    program([10, 30, 50], equality=([[1, 1, 1]], [100]), lower=[0, 0, 0], upper=[60, 90, 90]),
    x=[60, 40, 0],
    y=[30],
    z=[],
    lower=[0, 0, 20],
    upper=[20, 0, 0],
    u=[],
    objective=1800,
)
# a variable that is held at 25: its bounds carry 30 - 10 = 20 at the upper side
HELD = Known(
    program([10, 30], equality=([[1, 1]], [100]), lower=[25, 0], upper=[25, INF]),
    x=[25, 75],
    y=[30],
    z=[],
    lower=[0, 0],
    upper=[20, 0],
    u=[],
    objective=2500,
)
# minimise a^2/2 + b^2, a + b = 3: a = 2, b = 1, price 2
SQUARES = Known(
    program([0, 0], quadratic=[1, 2], equality=([[1, 1]], [3])),
    x=[2, 1],
    y=[2],
    z=[],
    lower=[0, 0],
    upper=[0, 0],
    u=[],
    objective=3,
)
# minimise -a - b in the unit disc: (1, |(a, b)|) in the cone with multiplier sqrt(2) and (-1, -1)
DISC = Known(
    program([-1, -1], cone=([[0, 0], [-1, 0], [0, -1]], [1, 0, 0], [3])),
    x=[np.sqrt(0.5), np.sqrt(0.5)],
    y=[],
    z=[],
    lower=[0, 0],
    upper=[0, 0],
    u=[np.sqrt(2), -1, -1],
    objective=-np.sqrt(2),
)
LINEAR = {"dispatch": DISPATCH, "bounds": BOUNDS, "held": HELD}
ALL = {**LINEAR, "squares": SQUARES, "disc": DISC}


def check(known: Known, solution: ConicSolution, tolerance: float) -> None:
    assert solution.status is SolveStatus.OPTIMAL
    for found, expected in (
        (solution.x, known.x),
        (solution.equality_dual, known.y),
        (solution.inequality_dual, known.z),
        (solution.lower_dual, known.lower),
        (solution.upper_dual, known.upper),
        (solution.cone_dual, known.u),
    ):
        assert found == pytest.approx(np.array(expected, dtype=float), abs=tolerance)
    assert known.program.cost(solution.x) == pytest.approx(known.objective, abs=tolerance)
    measured = residuals(known.program, solution)
    assert measured.primal <= tolerance
    assert measured.dual <= tolerance
    assert measured.gap <= 1e-6 * abs(known.objective) + tolerance


@pytest.mark.parametrize("name", LINEAR)
def test_highs_finds_known_solution_and_multipliers(name: str) -> None:
    check(LINEAR[name], highs_solver.solve_linear(LINEAR[name].program), 1e-9)


@pytest.mark.parametrize("name", ALL)
def test_clarabel_finds_known_solution_and_multipliers(name: str) -> None:
    solution, notes = clarabel_solver.solve_conic(ALL[name].program, DEFAULT_TOLERANCES)
    check(ALL[name], solution, 2e-4)
    assert notes == ()


def test_each_program_goes_to_its_solver() -> None:
    for known in ALL.values():
        solution, _ = solve_program(known.program, DEFAULT_TOLERANCES)
        assert solution.solver.split()[0] == ("HiGHS" if known.program.is_linear else "Clarabel")


def test_solver_names_carry_a_version() -> None:
    assert highs_solver.solver_name().startswith("HiGHS 1.")
    assert clarabel_solver.solver_name() == f"Clarabel {clarabel.__version__}"


def test_highs_refuses_what_it_is_not_used_for() -> None:
    with pytest.raises(LmpgapError, match="linear programs only"):
        highs_solver.solve_linear(SQUARES.program)


INFEASIBLE = {"equality": ([[1.0]], [5.0]), "lower": [0.0], "upper": [1.0]}


@pytest.mark.parametrize("quadratic", [[0.0], [1.0]])
def test_infeasible(quadratic: list[float]) -> None:
    solution, _ = solve_program(program([1.0], quadratic=quadratic, **INFEASIBLE), DEFAULT_TOLERANCES)  # type: ignore[arg-type]
    assert solution.status is SolveStatus.INFEASIBLE
    assert np.all(np.isnan(solution.x))
    assert residuals(program([1.0]), solution).primal == INF


@pytest.mark.parametrize("quadratic", [[0.0, 0.0], [0.0, 1.0]])
def test_unbounded(quadratic: list[float]) -> None:
    solution, _ = solve_program(program([-1.0, 0.0], quadratic=quadratic, lower=[0.0, 0.0]), DEFAULT_TOLERANCES)
    assert solution.status is SolveStatus.UNBOUNDED


@pytest.mark.parametrize("quadratic", [[0.0], [1.0]])
def test_crossed_bounds_are_infeasible(quadratic: list[float]) -> None:
    solution, _ = solve_program(program([1.0], quadratic=quadratic, lower=[2.0], upper=[1.0]), DEFAULT_TOLERANCES)
    assert solution.status is SolveStatus.INFEASIBLE
    assert solution.message == "a lower bound lies above its upper bound"


def test_equation_of_held_variables_is_checked() -> None:
    # With everything held, a + b = 3 is true or false before any solver is asked.
    for total, status in ((3.0, SolveStatus.OPTIMAL), (4.0, SolveStatus.INFEASIBLE)):
        held = program(
            [1, 1, 0], quadratic=[0, 0, 1], equality=([[1, 1, 0]], [total]), lower=[1, 2, 0], upper=[1, 2, 5]
        )
        assert clarabel_solver.solve_conic(held, DEFAULT_TOLERANCES)[0].status is status


@pytest.mark.parametrize("quadratic", [[0.0, 0.0], [1e-3, 1e-3]])
def test_redundant_and_degenerate_rows_leave_the_price_alone(quadratic: list[float]) -> None:
    redundant = program(
        [10, 30],
        quadratic=quadratic,
        equality=([[1, 1], [2, 2]], [100, 200]),
        inequality=([[1, 0], [1, 0], [0, 0]], [60, 60, 1]),
        lower=[0, 0],
    )
    solution, _ = solve_program(redundant, DEFAULT_TOLERANCES)
    assert solution.x == pytest.approx([60, 40], abs=1e-4)
    # The multipliers of the copies are not unique, what they add up to is.
    assert solution.equality_dual @ [1, 2] == pytest.approx(30 + quadratic[1] * 40, abs=1e-3)
    assert solution.inequality_dual[:2].sum() == pytest.approx(20 + quadratic[1] * 40 - quadratic[0] * 60, abs=1e-3)
    assert residuals(redundant, solution).dual < 1e-3


@pytest.mark.parametrize("scale", [1e-3, 1.0, 1e3])
@pytest.mark.parametrize("name", ["dispatch", "squares", "disc"])
def test_multipliers_scale_with_cost(name: str, scale: float) -> None:
    known = ALL[name]
    p = known.program
    scaled = ConicProgram(
        **{
            **{field: getattr(p, field) for field in p.__dataclass_fields__},
            "linear": scale * p.linear,
            "quadratic": scale * p.quadratic,
        }
    )
    solution, _ = solve_program(scaled, DEFAULT_TOLERANCES)
    assert solution.x == pytest.approx(known.x, abs=2e-2)
    assert solution.equality_dual / scale == pytest.approx(np.array(known.y, dtype=float), rel=2e-2)


def test_highs_row_duals_are_split_with_their_signs() -> None:
    equality, inequality = highs_solver.split_row_duals(np.array([30.0, -5.0, -20.0, 1e-12]), 2)
    assert equality == pytest.approx([30.0, -5.0])
    assert inequality == pytest.approx([20.0, 0.0])


def test_highs_reduced_costs_go_to_the_bound_that_holds() -> None:
    lower, upper = highs_solver.split_reduced_costs(
        np.array([4.0, -3.0, 2.0]), np.array([0.0, 0.0, -INF]), np.array([1.0, 1.0, 1.0])
    )
    assert lower == pytest.approx([4.0, 0.0, 0.0])
    assert upper == pytest.approx([0.0, 3.0, 0.0])


def test_clarabel_duals_are_split_in_stacking_order() -> None:
    parts = clarabel_solver.split_duals(np.arange(1.0, 11.0), 1, 2, 3, 1)
    assert [part.tolist() for part in parts] == [[-1.0], [2.0, 3.0], [4.0, 5.0, 6.0], [7.0], [8.0, 9.0, 10.0]]


def test_unknown_outcomes_count_as_failed() -> None:
    assert highs_solver.status_of(highspy.HighsModelStatus.kSolveError) is SolveStatus.FAILED
    assert highs_solver.status_of("something new") is SolveStatus.FAILED
    assert clarabel_solver.status_of("something new") is SolveStatus.FAILED
    assert clarabel_solver.status_of(clarabel.SolverStatus.AlmostSolved) is SolveStatus.INACCURATE


def test_residuals_see_each_kind_of_error() -> None:
    known = DISPATCH
    solution = highs_solver.solve_linear(known.program)

    def changed(**parts: np.ndarray) -> ConicSolution:
        return ConicSolution(**{**{k: getattr(solution, k) for k in solution.__dataclass_fields__}, **parts})

    assert residuals(known.program, changed(x=np.array([60.0, 41.0]))).primal == pytest.approx(1.0)
    assert residuals(known.program, changed(x=np.array([61.0, 39.0]))).primal == pytest.approx(1.0)
    assert residuals(known.program, changed(equality_dual=np.array([29.0]))).dual == pytest.approx(1.0)
    assert residuals(known.program, changed(inequality_dual=np.array([-20.0]))).dual == pytest.approx(40.0)
    assert residuals(known.program, changed(lower_dual=np.array([0.0, 2.0]))).gap == pytest.approx(80.0)
    disc = clarabel_solver.solve_conic(DISC.program, DEFAULT_TOLERANCES)[0]
    outside = ConicSolution(**{**{k: getattr(disc, k) for k in disc.__dataclass_fields__}, "x": np.array([1.0, 1.0])})
    assert residuals(DISC.program, outside).primal == pytest.approx(np.sqrt(2) - 1)


@pytest.mark.parametrize("name", ALL)
def test_stationarity_system_holds_the_solvers_own_multipliers(name: str) -> None:
    known = ALL[name]
    solution, _ = solve_program(known.program, DEFAULT_TOLERANCES)
    rows = np.arange(known.program.equality_rhs.size)
    system = stationarity_system(known.program, solution, rows, DEFAULT_TOLERANCES, 100.0)
    rest = system.gradient + system.jacobian.T @ system.multipliers
    assert rest == pytest.approx(np.zeros(known.program.n_var), abs=1e-3)
    assert np.all(system.multipliers[~system.free] >= -1e-6)
    # The entry at a balance row is the rise of cost per unit of load.
    assert system.multipliers[system.balance_rows] == pytest.approx(np.array(known.y, dtype=float), abs=1e-3)
    assert np.count_nonzero(~system.free) == {"dispatch": 1, "bounds": 2, "held": 2, "squares": 0, "disc": 1}[name]


def test_a_hundred_and_twenty_thousand_dollars_do_not_hide_one_units_marginal_cost() -> None:
    # 400 sloped units, one of them 2 kW short of its limit at the optimum: a relative gap of 1e-9 of the cost, all on
    # that unit, would put its marginal cost several cents off the price.
    n = 400
    slope = np.linspace(1.0, 3.0, n)
    price, near = 30.0, 7
    x = (price - 10.0) / slope
    upper = np.full(n, 100.0)
    upper[near] = x[near] + 2e-3
    known = ConicProgram(
        linear=np.full(n, 10.0),
        quadratic=slope,
        constant=1e5,
        equality=sparse.csr_array(np.ones((1, n))),
        equality_rhs=np.array([x.sum()]),
        inequality=sparse.csr_array((0, n)),
        inequality_rhs=np.zeros(0),
        lower=np.zeros(n),
        upper=upper,
        cone=sparse.csr_array((0, n)),
        cone_rhs=np.zeros(0),
        cone_sizes=np.zeros(0, dtype=np.int64),
    )
    answer, notes = clarabel_solver.solve_conic(known, DEFAULT_TOLERANCES)
    assert answer.status is SolveStatus.OPTIMAL
    assert notes == ()
    assert answer.equality_dual == pytest.approx([price], abs=1e-4)
    assert 10.0 + slope * answer.x == pytest.approx(np.full(n, price), abs=1e-3)


@pytest.mark.parametrize(("constant", "confirmed"), [(0.0, False), (-1e8, True)])
def test_an_early_stop_is_held_against_the_cost_that_the_solver_saw(constant: float, confirmed: bool) -> None:
    # min 1e6 (a - 100) with a >= 100: cost 0 with the constant in it, 1e8 without. Complementarity of 0.5 $ is 5e-9 of
    # the latter, within ten times the solver's tolerance.
    problem = replace(program([1e6], lower=[100.0 if constant else 0.0], upper=[INF]), constant=constant)
    at = 100.0 if constant else 0.0
    early = ConicSolution(
        status=SolveStatus.INACCURATE,
        message="AlmostSolved",
        solver="",
        seconds=0.0,
        iterations=1,
        x=np.array([at + 5e-7]),
        equality_dual=np.zeros(0),
        inequality_dual=np.zeros(0),
        lower_dual=np.array([1e6]),
        upper_dual=np.zeros(1),
        cone_dual=np.zeros(0),
    )
    status = clarabel_solver._confirmed(problem, early, DEFAULT_TOLERANCES).status
    assert (status is SolveStatus.OPTIMAL) == confirmed
