"""The covariance of a document's parameters, from its text to a matrix that is known to be possible.

Owns that matrix and its test. Must not know what the parameters do.
"""

from collections.abc import Mapping, Sequence
from math import sqrt

from motekeep.errors import DocumentError
from motekeep.measure.document import Estimate
from motekeep.measure.strict_table import Table

# On correlations: what is lost where a matrix was written with seven digits.
TOLERANCE = 1e-6


def covariance_matrix(pairs: Sequence[Table], estimates: Sequence[Estimate]) -> tuple[tuple[float, ...], ...]:
    """The whole matrix over `estimates`, from their own uncertainties and the `[[covariance]]` tables of a document.

    Raises DocumentError where a table is at fault or the matrix is none that random numbers can have.
    """
    index = {e.name: i for i, e in enumerate(estimates)}
    matrix = [[0.0] * len(estimates) for _ in estimates]
    for i, e in enumerate(estimates):
        matrix[i][i] = e.u**2
    seen: set[tuple[int, int]] = set()
    for table in pairs:
        i, j = _pair(table, index)
        value = table.number("value", -1e9, 1e9, "the product of both units")
        table.finish()
        if (i, j) in seen:
            raise table.refuse("of", "is a pair that was stated before", "state each pair once")
        seen.add((i, j))
        if abs(value) > estimates[i].u * estimates[j].u * (1.0 + TOLERANCE):
            raise table.refuse(
                "value", "is larger than the product of both uncertainties", "a correlation lies within -1 and 1"
            )
        matrix[i][j] = matrix[j][i] = value
    if not positive_semi_definite(matrix):
        raise DocumentError(
            "covariance",
            "is not positive semi-definite: some sum of parameters would be surer than sure",
            "state the covariance as the fit gave it",
        )
    return tuple([tuple(row) for row in matrix])


def _pair(table: Table, index: Mapping[str, int]) -> tuple[int, int]:
    names = table.elements("of", 2)
    for i, name in enumerate(names):
        if not isinstance(name, str) or name not in index:
            raise table.refuse(f"of[{i}]", "is no parameter of this document", f"known are {', '.join(index)}")
    if len(names) != 2 or names[0] == names[1]:
        raise table.refuse("of", "is not a pair", "name two parameters")
    first, second = sorted(index[str(name)] for name in names)
    return first, second


def positive_semi_definite(matrix: list[list[float]]) -> bool:
    """Whether a symmetric matrix with a diagonal >= 0 has no negative eigenvalue, but for rounding.

    Cholesky with pivoting (Higham 2002, Accuracy and Stability, ch. 10) on the matrix of correlations, so that units do
    not matter; what is left over when the pivots have run out has to be zero.
    """
    scales = [1.0 / sqrt(row[i]) if row[i] > 0.0 else 0.0 for i, row in enumerate(matrix)]
    left = [[v * a * b for v, b in zip(row, scales, strict=True)] for row, a in zip(matrix, scales, strict=True)]
    remaining = list(range(len(left)))
    while remaining:
        pivot = max(remaining, key=lambda i: left[i][i])
        top = left[pivot][pivot]
        if top <= TOLERANCE:
            return all(
                left[i][i] >= -TOLERANCE and all(abs(left[i][j]) <= sqrt(TOLERANCE) for j in remaining)
                for i in remaining
            )
        remaining.remove(pivot)
        for i in remaining:
            share = left[i][pivot] / top
            for j in remaining:
                left[i][j] -= share * left[pivot][j]
    return True
