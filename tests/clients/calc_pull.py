"""Drive a real LibreOffice Calc without a screen, so that a test sees what a spreadsheet receives.

Run with the Python that owns the module `uno` (on Debian /usr/bin/python3, from the packages libreoffice-calc-nogui
and python3-uno), not with the project's own:

    /usr/bin/python3 calc_pull.py < job.json > result.json

A job has `open` (a workbook to load instead of an empty one), `locale` (such as de-DE), `formulas` (put into A1, A2,
..., in English with semicolons, whatever the locale), `links` (`url` and `options` of CSV files, each linked on a sheet
of its own), `refresh` (times to update all links) and `save_as`. The result has the cells of the first sheet's column A
(or the `cells` that the job names, as [sheet, address]) and of each link.
"""

import json
import os
import shutil
import subprocess
import sys
import tempfile
import time
from contextlib import suppress
from pathlib import Path

import uno
from com.sun.star.beans import PropertyValue
from com.sun.star.table import CellAddress

CSV_FILTER = "Text - txt - csv (StarCalc)"
SAVED = {"xlsx": "Calc MS Excel 2007 XML", "ods": "calc8"}
OFFICE = "/org.openoffice.Office"
HEAD = (
    '<?xml version="1.0" encoding="UTF-8"?><oor:items xmlns:oor="http://openoffice.org/2001/registry" '
    'xmlns:xs="http://www.w3.org/2001/XMLSchema" xmlns:xsi="http://www.w3.org/2001/XMLSchema-instance">'
)


def named(name, value):
    made = PropertyValue()
    made.Name, made.Value = name, value
    return made


def write_profile(folder, locale, trusted):
    """Write a profile to be thrown away: links update and everything recalculates when a file is opened.

    A file in the folder `trusted` may reach out; elsewhere each WEBSERVICE would be Err:540.
    """
    items = [
        (OFFICE + ".Calc/Content/Update", "Link", "0"),
        (OFFICE + ".Calc/Formula/Load", "ODFRecalcMode", "0"),
        (OFFICE + ".Calc/Formula/Load", "OOXMLRecalcMode", "0"),
    ]
    if trusted:
        items.append((OFFICE + ".Common/Security/Scripting", "SecureURL", f"<it>file://{trusted}</it>"))
    if locale:
        items.append(("/org.openoffice.Setup/L10N", "ooSetupSystemLocale", locale))
    body = "".join(
        f'<item oor:path="{path}"><prop oor:name="{name}" oor:op="fuse"><value>{value}</value></prop></item>'
        for path, name, value in items
    )
    user = Path(folder) / "user"
    user.mkdir()
    (user / "registrymodifications.xcu").write_text(f"{HEAD}{body}</oor:items>", "utf-8")


def start(folder, seconds=90.0):
    pipe = f"calc_pull_{os.getpid()}"
    process = subprocess.Popen(
        [
            "soffice",
            "--headless",
            "--norestore",
            "--nologo",
            "--nodefault",
            f"--accept=pipe,name={pipe};urp;",
            f"-env:UserInstallation=file://{folder}",
        ],
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
    )
    local = uno.getComponentContext()
    resolver = local.ServiceManager.createInstanceWithContext("com.sun.star.bridge.UnoUrlResolver", local)
    end = time.monotonic() + seconds
    while True:
        try:
            return process, resolver.resolve(f"uno:pipe,name={pipe};urp;StarOffice.ComponentContext")
        except Exception:
            if time.monotonic() > end or process.poll() is not None:
                process.kill()
                raise
            time.sleep(0.2)


def described(cell):
    return {"formula": cell.Formula, "text": cell.String, "number": cell.Value, "error": cell.getError()}


def used(sheet):
    """Return the cells in use, each a text or a number, and their formulas."""
    cursor = sheet.createCursor()
    cursor.gotoEndOfUsedArea(False)
    end = cursor.RangeAddress
    area = sheet.getCellRangeByPosition(0, 0, end.EndColumn, end.EndRow)
    return {"values": [list(row) for row in area.DataArray], "formulas": [list(row) for row in area.FormulaArray]}


def work(job, document, context):
    sheet = document.Sheets.getByIndex(0)
    for row, formula in enumerate(job.get("formulas", [])):
        sheet.getCellByPosition(0, row).setFormula(formula)
    for number, link in enumerate(job.get("links", [])):
        document.Sheets.insertNewByName(f"link{number}", number + 1)
        where = CellAddress()
        where.Sheet, where.Column, where.Row = number + 1, 0, 0
        document.AreaLinks.insertAtPosition(where, link["url"], "CSV_all", CSV_FILTER, link["options"])
    document.calculateAll()
    dispatch = context.ServiceManager.createInstanceWithContext("com.sun.star.frame.DispatchHelper", context)
    for _ in range(job.get("refresh", 0)):
        for number in range(document.AreaLinks.Count):
            document.AreaLinks.getByIndex(number).refresh()
        for command in (".uno:UpdateAllLinks", ".uno:CalculateHard"):
            dispatch.executeDispatch(document.CurrentController.Frame, command, "", 0, ())
    if "cells" in job:
        found = [document.Sheets.getByName(name).getCellRangeByName(at) for name, at in job["cells"]]
        cells = [described(cell) for cell in found]
    else:
        cells = [described(sheet.getCellByPosition(0, row)) for row in range(len(job.get("formulas", [])))]
    links = [used(document.Sheets.getByIndex(number + 1)) for number in range(len(job.get("links", [])))]
    if job.get("save_as"):
        kind = SAVED[job["save_as"].rsplit(".", 1)[-1]]
        document.storeToURL(Path(job["save_as"]).resolve().as_uri(), (named("FilterName", kind),))
    return {"cells": cells, "links": links}


def run(job):
    folder = tempfile.mkdtemp(prefix="calc_pull_")
    process = None
    try:
        opened = Path(job["open"]).resolve() if job.get("open") else None
        write_profile(folder, job.get("locale"), opened and opened.parent)
        process, context = start(folder)
        desktop = context.ServiceManager.createInstanceWithContext("com.sun.star.frame.Desktop", context)
        address = opened.as_uri() if opened else "private:factory/scalc"
        full_update = 3
        how = (named("Hidden", True), named("UpdateDocMode", full_update))
        document = desktop.loadComponentFromURL(address, "_blank", 0, how)
        result = work(job, document, context)
        document.close(True)
        with suppress(Exception):  # it may be gone before it answers
            desktop.terminate()
        process.wait(30)
        return result
    finally:
        if process is not None and process.poll() is None:
            process.kill()
        shutil.rmtree(folder, ignore_errors=True)


if __name__ == "__main__":
    json.dump(run(json.load(sys.stdin)), sys.stdout, ensure_ascii=False)
