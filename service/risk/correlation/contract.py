"""What a form of a correlation matrix is: something that is checked and then gives a root of the matrix."""

from dataclasses import dataclass as plain

from pydantic.dataclasses import dataclass

from service.errors import Fault, InvalidValue
from service.risk.correlation.roots import Root
from service.risk.words import STRICT

NOT_A_CORRELATION = "not_a_correlation"
SLACK = 1e-9  # entries, diagonal and row norms may be off by this much, as sums of rounded decimals are
MOST_FAULTS = 50  # a table of wrong entries is one mistake, not a thousand


@plain(frozen=True, slots=True)
class Mixing:
    """The law whose rank correlations are meant, where the correlations are given as such.

    Attributes
    ----------
    df : float or None
        Degrees of freedom of a Student t copula; None for a Gaussian one.
    """

    df: float | None = None


@dataclass(frozen=True, kw_only=True, config=STRICT)
class CorrelationForm:
    """The contract of all forms; faults point into the form, e.g. ``/values/2/1``."""

    def check(self, factors: int) -> None:
        """Raise InvalidValue if this is no form of a matrix of so many factors, as far as that is seen at once.

        Whether the matrix is positive semi-definite shows when its root is taken.
        """
        raise NotImplementedError

    def root(self, factors: int, mixing: Mixing) -> Root:
        """Return what makes correlated normals of independent ones.

        Raises
        ------
        InvalidValue
            As `check`, and if the matrix is not positive semi-definite and is not to be repaired.
        """
        raise NotImplementedError


def refuse(faults: list[Fault]) -> None:
    """Raise the faults, if any."""
    if faults:
        more = f" (and {len(faults) - 1} more)" if len(faults) > 1 else ""
        raise InvalidValue(faults[0].detail + more, faults=faults)
