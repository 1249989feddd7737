"""One result model per calculation.

Plain dataclasses: they are written once, by us, so nothing is validated at run time; their types make the
OpenAPI document and a test holds every answer against it.
"""

from service.schemas.results.allocations import (
    ALLOCATIONS_COLUMNS,
    AllocationResult,
    AllocationRow,
    AllocationsAnswer,
    GroupRow,
    SmoothingWindow,
)
from service.schemas.results.books import (
    BOOK_COLUMNS,
    BOOKS_COLUMNS,
    BookDescription,
    BooksAnswer,
    BookSubPortfolio,
    BookSummary,
    ValueAnswer,
)
from service.schemas.results.comparisons import (
    COMPARISONS_COLUMNS,
    ChangeByState,
    ChangedPart,
    ComparedBook,
    ComparisonResult,
    ComparisonsAnswer,
)
from service.schemas.results.increments import (
    INCREMENTS_COLUMNS,
    BaseFigure,
    CandidateFigures,
    CandidateResult,
    IncrementsAnswer,
    Moved,
)
from service.schemas.results.measures import (
    MEASURES_COLUMNS,
    GroupFigure,
    MeasureResult,
    MeasuresAnswer,
    StandAloneFigure,
)
from service.schemas.results.shared import (
    Figure,
    Interval,
    Labels,
    Money,
    Note,
    NoteCode,
    Provenance,
    SubPortfolioLoss,
    Tail,
    TailFactor,
    TailScenario,
    Whole,
)

__all__ = [
    "ALLOCATIONS_COLUMNS",
    "BOOKS_COLUMNS",
    "BOOK_COLUMNS",
    "COMPARISONS_COLUMNS",
    "INCREMENTS_COLUMNS",
    "MEASURES_COLUMNS",
    "AllocationResult",
    "AllocationRow",
    "AllocationsAnswer",
    "BaseFigure",
    "BookDescription",
    "BookSubPortfolio",
    "BookSummary",
    "BooksAnswer",
    "CandidateFigures",
    "CandidateResult",
    "ChangeByState",
    "ChangedPart",
    "ComparedBook",
    "ComparisonResult",
    "ComparisonsAnswer",
    "Figure",
    "GroupFigure",
    "GroupRow",
    "IncrementsAnswer",
    "Interval",
    "Labels",
    "MeasureResult",
    "MeasuresAnswer",
    "Money",
    "Moved",
    "Note",
    "NoteCode",
    "Provenance",
    "SmoothingWindow",
    "StandAloneFigure",
    "SubPortfolioLoss",
    "Tail",
    "TailFactor",
    "TailScenario",
    "ValueAnswer",
    "Whole",
]
