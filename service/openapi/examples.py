"""The named examples of the document: the pairs of requests and answers that `openapi_examples/` lists."""

import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any, NamedTuple

from service.payloads import CSV, split_multipart

JSON = "application/json"
MULTIPART = "multipart/form-data"
INDEX = "index.json"

Shown = Mapping[str, dict[str, Any]]
"""Media type to name to example object."""


class Examples(NamedTuple):
    """The examples of one calculation."""

    requests: Shown
    answers: Shown


def read_examples(folder: Path, calculation: str) -> Examples:
    """Return what `folder` shows of a calculation; tables that are no text are not shown, and so nor is their answer.

    Parameters
    ----------
    folder : Path
        With an `index.json`; a folder without it shows nothing.
    calculation : str
    """
    index = folder / INDEX
    rows = json.loads(index.read_bytes()) if index.exists() else []
    requests: dict[str, dict[str, Any]] = {}
    answers: dict[str, dict[str, Any]] = {}
    for row in rows:
        if row["calculation"] != calculation:
            continue
        asked = _request((folder / row["request"]).read_bytes(), row["content_type"])
        if asked is not None:
            answered = (folder / row["response"]).read_bytes()
            value = json.loads(answered) if row["accept"] == JSON else answered.decode()
            requests.setdefault(_media_type(row["content_type"]), {})[row["name"]] = _example(row, asked)
            answers.setdefault(row["accept"], {})[row["name"]] = _example(row, value)
    return Examples(requests, answers)


def _example(row: Mapping[str, str], value: Any) -> dict[str, Any]:
    words = row["shows"] + (f" Query: `{row['query']}`." if row["query"] else "")
    return {"summary": row["title"], "description": words, "value": value}


def _media_type(content_type: str) -> str:
    return content_type.partition(";")[0]


def _request(body: bytes, content_type: str) -> Any:
    """Return a request as the document shows it; None for bytes that are no text."""
    media_type = _media_type(content_type)
    if media_type == JSON:
        return json.loads(body)
    if media_type == CSV:
        return body.decode()
    if media_type == MULTIPART:
        parts = split_multipart(body, content_type)
        if parts.table_media_type == CSV:
            return {"request": json.loads(parts.request), "table": bytes(parts.table).decode()}
    return None
