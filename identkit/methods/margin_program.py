"""The linear program of largest margin that differential correction solves in every step.

Solved by the dual simplex method: Q. Huangfu, J. A. J. Hall, "Parallelizing the dual revised
simplex method", Math. Prog. Comp. 10, 119-142, 2018 (the solver behind scipy.optimize.linprog).
"""

from dataclasses import dataclass, field

import numpy as np

from identkit.methods.arnoldi_basis import ArnoldiBasis
from identkit.methods.arrays import BoolArray, FloatArray

LARGEST = 1e3


@dataclass(frozen=True)
class HardRows:
    """Linear conditions P(at) >= share * P(beside) on numerator and denominator alike or apart.

    Attributes
    ----------
    at, beside
        (rows,) abscissae.
    share
        (rows,) share of the neighbour's value that is asked for; 0 is plain positivity.
    on_numerator
        (rows,) true where P is the numerator, false where it is the denominator.
    """

    at: FloatArray = field(default_factory=lambda: np.zeros(0))
    beside: FloatArray = field(default_factory=lambda: np.zeros(0))
    share: FloatArray = field(default_factory=lambda: np.zeros(0))
    on_numerator: BoolArray = field(default_factory=lambda: np.zeros(0, dtype=bool))

    def joined(self, other: "HardRows") -> "HardRows":
        """Return these rows followed by the other ones."""
        return HardRows(
            np.concatenate([self.at, other.at]),
            np.concatenate([self.beside, other.beside]),
            np.concatenate([self.share, other.share]),
            np.concatenate([self.on_numerator, other.on_numerator]),
        )


def hard_matrix(hard: HardRows, bases: tuple[ArnoldiBasis, ArnoldiBasis]) -> FloatArray:
    """Return the rows as (rows, unknowns), for unknowns N then D, to be kept at or below 0."""
    blocks = []
    for k, basis in enumerate(bases):
        mine = hard.on_numerator == (k == 0)
        at, beside = basis.evaluate(hard.at[mine]), basis.evaluate(hard.beside[mine])
        block = hard.share[mine, None] * beside - at
        block = block / np.linalg.norm(at, axis=1)[:, None]
        other = np.zeros((block.shape[0], bases[1 - k].degree + 1))
        blocks.append(np.hstack([block, other] if k == 0 else [other, block]))
    return np.vstack(blocks)


def largest_margin(
    soft: FloatArray, hard: FloatArray, normal: FloatArray
) -> tuple[FloatArray, float, FloatArray] | None:
    """Minimise z with soft @ c <= z, hard @ c <= 0, normal @ c = 1.

    The box on c keeps the program well posed; where it is active the multipliers prove nothing.

    Parameters
    ----------
    soft, hard
        (rows, unknowns) matrices.
    normal
        (unknowns,) scales the otherwise homogeneous problem.

    Returns
    -------
    tuple
        (unknowns,) c, the margin z, and the (rows,) multipliers of soft then hard; None if the
        solver gave up.
    """
    from scipy.optimize import linprog

    count = normal.size
    column = np.concatenate([-np.ones(soft.shape[0]), np.zeros(hard.shape[0])])
    matrix = np.hstack([np.vstack([soft, hard]), column[:, None]])
    solved = linprog(
        np.append(np.zeros(count), 1.0),
        A_ub=matrix,
        b_ub=np.zeros(matrix.shape[0]),
        A_eq=np.append(normal, 0.0)[None],
        b_eq=np.ones(1),
        bounds=[(-LARGEST, LARGEST)] * count + [(-1.0, None)],
        method="highs-ds",
        options={"primal_feasibility_tolerance": 1e-10, "dual_feasibility_tolerance": 1e-10},
    )
    if solved.status != 0:
        return None
    return solved.x[:count], float(solved.x[count]), -np.asarray(solved.ineqlin.marginals)
