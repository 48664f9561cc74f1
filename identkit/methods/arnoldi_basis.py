"""Polynomial bases that stay well conditioned on any set of points.

Source: P. D. Brubeck, Y. Nakatsukasa, L. N. Trefethen, "Vandermonde with Arnoldi", SIAM Review
63(2), 405-415, 2021: the columns of a Vandermonde matrix are orthogonalised as they are made, and
the recurrence is kept so that the same polynomials can be evaluated anywhere else.

Here the first column may be any positive function of the points, so that the values are those of
polynomials divided by a known positive function; roots are eigenvalues of the comrade matrix.
"""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray


@dataclass(frozen=True)
class ArnoldiBasis:
    """Orthogonal polynomials known by their recurrence.

    Attributes
    ----------
    recurrence
        (degree + 1, degree) upper Hessenberg matrix H with x Q_degree = Q_{degree+1} H.
    constant
        Value of the polynomial of degree 0.
    """

    recurrence: FloatArray
    constant: float

    @property
    def degree(self) -> int:
        """Highest degree."""
        return int(self.recurrence.shape[1])

    def evaluate(self, x: FloatArray) -> FloatArray:
        """Return the (points, degree + 1) values of all basis polynomials."""
        columns = [np.full(x.shape, self.constant)]
        for k in range(self.degree):
            column = x * columns[k]
            for j in range(k + 1):
                column = column - self.recurrence[j, k] * columns[j]
            columns.append(column / self.recurrence[k + 1, k])
        return np.stack(columns, axis=1)

    def roots(self, coefficients: FloatArray) -> ComplexArray:
        """Return the roots of the polynomial with these coefficients in the basis.

        A leading coefficient that vanishes against the others lowers the degree: fewer roots
        are returned.
        """
        size = np.abs(coefficients).max()
        degree = self.degree
        while degree > 0 and abs(coefficients[degree]) <= 1e-15 * size:
            degree -= 1
        comrade = self.recurrence[:degree, :degree].copy()
        if degree:
            comrade[:, -1] -= (
                self.recurrence[degree, degree - 1] * coefficients[:degree] / coefficients[degree]
            )
        return np.asarray(np.linalg.eigvals(comrade), dtype=complex)


def arnoldi_basis(
    x: FloatArray, first: FloatArray, measure: FloatArray, degree: int
) -> tuple[ArnoldiBasis, FloatArray]:
    """Build polynomials whose products with `first` are orthonormal under `measure`.

    Parameters
    ----------
    x
        (points,) abscissae in [-1, 1].
    first
        (points,) positive values that multiply every polynomial.
    measure
        (points,) non-negative weights of the inner product; more than `degree` of them positive.
    degree
        Highest degree.

    Returns
    -------
    ArnoldiBasis
        The recurrence, for evaluation without `first` at other points.
    FloatArray
        (points, degree + 1) values of the polynomials times `first`.
    """
    constant = 1.0 / np.sqrt(measure @ first**2)
    values = np.empty((x.size, degree + 1))
    values[:, 0] = first * constant
    recurrence = np.zeros((degree + 1, degree))
    for k in range(degree):
        column = x * values[:, k]
        for _ in range(2):  # twice is enough: Giraud et al. 2005
            parts = (measure * column) @ values[:, : k + 1]
            recurrence[: k + 1, k] += parts
            column = column - values[:, : k + 1] @ parts
        recurrence[k + 1, k] = np.sqrt(measure @ column**2)
        values[:, k + 1] = column / recurrence[k + 1, k]
    return ArnoldiBasis(recurrence, float(constant)), values
