"""How the example workbook is made: ``python -m openapi_examples.workbook`` writes it again.

It asks a service with the demonstration books (`tailrace serve --demo`) for the contributions of Ternholm Mutual: one
cell per figure, checked against the total, and many figures out of one XML answer. Whoever changes the address, the
book, the measure or the number beside `refresh` pulls anew.
"""

from pathlib import Path

from openpyxl import Workbook
from openpyxl.styles import Font
from openpyxl.worksheet.worksheet import Worksheet

from service import demo

FILE = demo.FOLDER / demo.WORKBOOK
ADDRESS = "http://127.0.0.1:8000"
PARTS = ("ferry_hull", "ferry_liability", "cargo", "quay_property", "storm", "rates_book", "credit_book")
SETTINGS = (
    ("address", ADDRESS, "where the service is"),
    ("book", "ternholm", "a name from /v1/books"),
    ("measure", "expected_shortfall", "a kind of measure"),
    ("level", "0.99", "as text, with a point"),
    ("refresh", 1, "change it to pull anew"),
)
FIGURES, ONE_ANSWER = "Figures", "One answer"
FIRST = 9  # row of the first sub-portfolio
COLUMNS = (
    ("contribution", "contribution", "value"),
    ("standard error", "contribution", "standard_error"),
    ("lower", "contribution", "lower"),
    ("upper", "contribution", "upper"),
    ("stand-alone", "stand_alone", "value"),
    ("share", "share", "value"),
)
QUESTION = '"measure="&Figures!$B$3&"&level="&Figures!$B$4&"&refresh="&Figures!$B$5'
BOOK = 'Figures!$B$1&"/v1/books/"&Figures!$B$2'


def workbook(address: str = ADDRESS) -> Workbook:
    """Return the workbook, asking the service at `address`."""
    made = Workbook()
    made.remove(made.worksheets[0])
    _figures(made.create_sheet(FIGURES), address)
    _one_answer(made.create_sheet(ONE_ANSWER))
    return made


def _figures(sheet: Worksheet, address: str) -> None:
    """Write a cell per figure; the sum of the contributions is the total."""
    for row, (name, value, meaning) in enumerate(SETTINGS, 1):
        sheet.append([name, address if name == "address" else value, meaning])
        sheet.cell(row, 2).number_format = "@" if name != "refresh" else "0"
    heads = ["sub-portfolio", *(name for name, _, _ in COLUMNS)]
    for column, name in enumerate(heads, 1):
        sheet.cell(FIRST - 1, column, name).font = Font(bold=True)
    for row, part in enumerate(PARTS, FIRST):
        sheet.cell(row, 1, part)
        for column, (_, of, field) in enumerate(COLUMNS, 2):
            rest = f'"&sub_portfolio="&_xlfn.ENCODEURL($A{row})'
            sheet.cell(row, column, _number(f'"/value.txt?of={of}&field={field}"&{rest}&"&"'))
    last = FIRST + len(PARTS)
    sheet.cell(last, 1, "sum").font = Font(bold=True)
    sheet.cell(last, 2, f"=SUM(B{FIRST}:B{last - 1})")
    sheet.cell(last + 1, 1, "total").font = Font(bold=True)
    sheet.cell(last + 1, 2, _number('"/value.txt?of=total&"'))
    sheet.cell(last + 2, 1, "difference")
    sheet.cell(last + 2, 2, f"=B{last}-B{last + 1}")
    _widths(sheet)


def _one_answer(sheet: Worksheet) -> None:
    """Write one answer into A1 and take the contributions out of it, in Excel's way or else in Calc's."""
    sheet["A1"] = f'=_xlfn.WEBSERVICE({BOOK}&"/allocations.xml?"&{QUESTION})'
    for row, part in enumerate(PARTS, 2):
        found = f"//row[@scope='sub_portfolio'][@id='{part}']/@contribution"
        by_node, by_text = (_parsed(path) for path in (found, f"string({found})"))
        sheet.cell(row, 1, part)
        sheet.cell(row, 2, f"=IFERROR({by_node},{by_text})")
    _widths(sheet)


def _parsed(path: str) -> str:
    return f'_xlfn.NUMBERVALUE(_xlfn.FILTERXML($A$1,"{path}"),".",",")'


def _number(path: str) -> str:
    return f'=_xlfn.NUMBERVALUE(_xlfn.WEBSERVICE({BOOK}&{path}&{QUESTION}),".",",")'


def _widths(sheet: Worksheet) -> None:
    for letter in "ABCDEFG":
        sheet.column_dimensions[letter].width = 22


def write(file: Path = FILE, address: str = ADDRESS) -> None:
    """Write the workbook."""
    workbook(address).save(file)


if __name__ == "__main__":
    write()
