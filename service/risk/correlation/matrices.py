"""Correlations given as a whole matrix: of the copula's own parameter, or of rank correlations."""

from typing import Annotated, Literal

import numpy as np
from pydantic import Field
from pydantic.dataclasses import dataclass

from service.errors import Fault, InvalidValue
from service.risk.correlation.contract import (
    MOST_FAULTS,
    NOT_A_CORRELATION,
    SLACK,
    CorrelationForm,
    Mixing,
    refuse,
)
from service.risk.correlation.nearest import Repair, nearest_correlation
from service.risk.correlation.roots import Array, DenseRoot, Root
from service.risk.correlation.spearman import student_correlations
from service.risk.words import STRICT

MOST_FACTORS = 2000  # of a whole matrix, whose root takes about n^3 operations
ZERO = 1e-10  # an eigenvalue this little below 0 is 0 up to the rounding of the entries

VALUES = "The matrix as rows, without unit: symmetric, with a diagonal of 1."
REPAIR = "`nearest` puts the nearest correlation matrix in place of one that is not positive semi-definite."

Rows = Annotated[list[Annotated[list[float], Field(min_length=1)]], Field(min_length=1)]


@dataclass(frozen=True, kw_only=True, config=STRICT)
class _Whole(CorrelationForm):
    """A symmetric matrix with unit diagonal; members say which correlations it stands for."""

    values: Annotated[Rows, Field(description=VALUES)]
    repair: Annotated[Literal["nearest"] | None, Field(description=REPAIR)] = None

    def correlations(self, values: Array, mixing: Mixing) -> Array:
        """Return the correlations that the entries stand for."""
        raise NotImplementedError

    meaning = "the matrix"

    def check(self, factors: int) -> None:
        if factors > MOST_FACTORS:
            detail = (
                f"a whole matrix has at most {MOST_FACTORS} factors, not {factors}; "
                "correlations of kind loadings or equal have no such limit"
            )
            raise InvalidValue.at("/values", detail, code="wrong_count")
        if len(self.values) != factors:
            detail = f"the matrix has {len(self.values)} rows for {factors} factors"
            raise InvalidValue.at("/values", detail, code="wrong_count")
        faults = [
            Fault(
                detail=f"the row has {len(row)} entries for {factors} factors",
                code="wrong_count",
                pointer=f"/values/{i}",
            )
            for i, row in enumerate(self.values)
            if len(row) != factors
        ]
        refuse(faults[:MOST_FAULTS])
        refuse(_wrong_entries(np.array(self.values)))

    def root(self, factors: int, mixing: Mixing) -> Root:
        self.check(factors)
        values = np.array(self.values)
        given = self.correlations(np.clip((values + values.T) / 2.0, -1.0, 1.0), mixing)
        np.fill_diagonal(given, 1.0)
        try:
            return DenseRoot(np.asarray(np.linalg.cholesky(given)), triangular=True)
        except np.linalg.LinAlgError:
            eigenvalues, vectors = np.linalg.eigh(given)
        smallest = float(eigenvalues[0])
        if smallest >= -ZERO:
            return DenseRoot(_from_spectrum(eigenvalues, vectors), triangular=False)
        if self.repair is None:
            detail = (
                f"{self.meaning} is not positive semi-definite: its smallest eigenvalue is {smallest:.6g}; "
                "repair: nearest would take the nearest correlation matrix"
            )
            raise InvalidValue.at("/values", detail, code=NOT_A_CORRELATION)
        used = nearest_correlation(given)
        moved = used - given
        repair = Repair(smallest, float(np.linalg.norm(moved)), float(np.max(np.abs(moved))))
        return DenseRoot(_from_spectrum(*np.linalg.eigh(used)), triangular=False, repair=repair)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class MatrixCorrelation(_Whole):
    """The correlation matrix of the copula: its own parameter, not the Pearson correlation of the factors."""

    kind: Literal["matrix"]
    """Tag of this form."""

    def correlations(self, values: Array, mixing: Mixing) -> Array:  # noqa: ARG002  # as the contract
        """Return the entries."""
        return values


@dataclass(frozen=True, kw_only=True, config=STRICT)
class KendallTauCorrelation(_Whole):
    """Kendall's tau of each pair, from which the copula's correlation is sin(π·tau/2).

    The relation holds for every elliptical copula: H. B. Fang, K. T. Fang and S. Kotz, J. of Multivariate Analysis
    82 (2002) 1-16. Of a grouped Student t copula it holds within a group and nearly between groups.
    """

    kind: Literal["kendall_tau"]
    """Tag of this form."""

    meaning = "the matrix of sin(pi tau / 2)"

    def correlations(self, values: Array, mixing: Mixing) -> Array:  # noqa: ARG002  # as the contract
        """Return sin(pi tau / 2)."""
        return np.sin(0.5 * np.pi * values)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class SpearmanRhoCorrelation(_Whole):
    """Spearman's rho of each pair; the copula's correlation is 2·sin(π·rho/6) if it is Gaussian.

    The closed form is of K. Pearson (1907); see W. H. Kruskal, J. of the American Statistical Association 53 (1958)
    814-861. For a Student t copula the relation is solved numerically.
    """

    kind: Literal["spearman_rho"]
    """Tag of this form."""

    meaning = "the matrix of the correlations with these Spearman rhos"

    def correlations(self, values: Array, mixing: Mixing) -> Array:
        """Return the correlations with these Spearman rhos."""
        if mixing.df is None:
            return 2.0 * np.sin(np.pi / 6.0 * values)
        return student_correlations(values, mixing.df)


def _wrong_entries(values: Array) -> list[Fault]:
    """Return faults of the entries of a square matrix: of its range, else of its diagonal, else of its symmetry."""
    for wrong, code, words in (
        (np.abs(values) > 1.0 + SLACK, "out_of_range", "{here} is not between -1 and 1"),
        (
            np.diag(np.abs(np.diag(values) - 1.0) > SLACK),
            NOT_A_CORRELATION,
            "the diagonal of a correlation matrix is 1, not {here}",
        ),
        (
            np.tril(np.abs(values - values.T) > SLACK),
            NOT_A_CORRELATION,
            "the matrix is not symmetric: {here} here and {across} across the diagonal",
        ),
    ):
        places = np.argwhere(wrong)[:MOST_FAULTS].tolist()
        if places:
            return [
                Fault(
                    detail=words.format(here=repr(float(values[i, j])), across=repr(float(values[j, i]))),
                    code=code,
                    pointer=f"/values/{i}/{j}",
                )
                for i, j in places
            ]
    return []


def _from_spectrum(eigenvalues: Array, vectors: Array) -> Array:
    """Return a root from the eigenvalues that are not 0, largest first, its rows scaled to norm 1."""
    kept = eigenvalues > eigenvalues.size * np.finfo(float).eps * eigenvalues[-1]
    root = vectors[:, kept][:, ::-1] * np.sqrt(eigenvalues[kept][::-1])
    return np.asarray(root / np.sqrt(np.sum(root**2, axis=1))[:, None])
