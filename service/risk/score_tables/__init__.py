"""Score tables: from the scores of a factor to its values, in a few nanoseconds each.

A quantile function costs up to a microsecond a value, and the scores of a copula would first have to be made
probabilities. Both steps together are one function of the score, smooth between a few known places, so it is
tabulated: polynomials on equal cells, each checked against the exact function between its nodes. What fails the
check or lies beyond the table is computed exactly; steps, jumps and ends of supports are exact by construction.
"""

from service.risk.score_tables.description import WHOLE, Affine, Array, Atoms, Piece, Tabulated
from service.risk.score_tables.tables import ScoreTable, Scratch

__all__ = ["WHOLE", "Affine", "Array", "Atoms", "Piece", "ScoreTable", "Scratch", "Tabulated"]
