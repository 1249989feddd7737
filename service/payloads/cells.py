"""What holds for the cells of every table: their number is limited, and each is finite."""

import numpy as np
from numpy.typing import NDArray

from service.errors import Fault, Limit, LimitExceeded
from service.settings import variable

SETTLE_BLOCK = 1 << 15
"""Cells looked at together (256 KB): they stay in the cache between the two steps of `settle`."""

EXCERPT_LENGTH = 40
"""Characters of an offending value that are repeated to the caller."""


def require_cells(cells: int, *, max_cells: int, fault: Fault | None = None, at_least: bool = False) -> None:
    """Refuse a table of more than `max_cells` cells.

    Parameters
    ----------
    cells : int
        The number of cells, or what is known of it so far.
    max_cells : int
        The limit of this server.
    fault : Fault, optional
        Where the table stands; its detail and code are replaced.
    at_least : bool
        Whether the table may hold more than `cells`.

    Raises
    ------
    LimitExceeded
        With the name of the setting, and what was asked.
    """
    if cells <= max_cells:
        return
    count = f"at least {cells:,}" if at_least else f"{cells:,}"
    detail = f"the table has {count} cells, but this server takes at most {max_cells:,}"
    place = fault or Fault(detail=detail, code="", pointer="")
    raise LimitExceeded(
        detail,
        limit=Limit(name="max_cells", allowed=max_cells, asked=cells, setting=variable("max_cells")),
        faults=[
            Fault(detail=detail, code=LimitExceeded.code, pointer=place.pointer, part=place.part),
        ],
    )


def settle(values: NDArray[np.float64]) -> tuple[int, int] | None:
    """Turn every −0.0 of `values` into 0 in place, and find the first cell that is not finite.

    Parameters
    ----------
    values : ndarray of shape (rows, columns)
        C ordered and writeable.

    Returns
    -------
    tuple of int or None
        Row and column, counted from 0, of the first NaN or infinity; ``None`` if there is neither.
    """
    flat = values.reshape(-1)
    with np.errstate(invalid="ignore"):  # a signalling NaN is found by the test below it
        for start in range(0, flat.size, SETTLE_BLOCK):
            block = flat[start : start + SETTLE_BLOCK]
            block += 0.0
            finite = np.isfinite(block)
            if not finite.all():
                row, column = divmod(start + int(finite.argmin()), values.shape[1])
                return row, column
    return None


def excerpt(text: str) -> str:
    """Return `text` in quotes, cut to a length that may be repeated to the caller."""
    return repr(text if len(text) <= EXCERPT_LENGTH else text[: EXCERPT_LENGTH - 1] + "…")
