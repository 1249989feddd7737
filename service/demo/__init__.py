"""The demonstration: Ternholm Mutual, a harbour town's insurer, all of it invented."""

from pathlib import Path

FOLDER = Path(__file__).parent
"""Also a folder of books."""
REQUEST = "ternholm.json"
TABLE = "ternholm.csv"
MODEL = "ternholm_model.json"
WORKBOOK = "ternholm.xlsx"


BETWEEN = """
A factor model of the same kind of insurer, simulated here: claims with their covers, market factors,
counterparties. It is another invented book and is not calibrated to the scenarios above: its figures differ.
"""
NEXT_STEPS = """
The same over HTTP: start the service and open its page.

  tailrace serve --demo
  http://127.0.0.1:8000/
"""


def request() -> bytes:
    """Return the allocation request of the demonstration, whose table stands in the part `table`."""
    return FOLDER.joinpath(REQUEST).read_bytes().replace(f'"file": "{TABLE}"'.encode(), b'"part": "table"')


def model() -> bytes:
    """Return the allocation request of the same insurer as a factor model, to be simulated."""
    return FOLDER.joinpath(MODEL).read_bytes()


def table() -> bytes:
    """Return its loss table as CSV, in thousands of euros."""
    return FOLDER.joinpath(TABLE).read_bytes()
