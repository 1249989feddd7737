"""A decoded JSON document as text again, for a validating parser."""

import json
from typing import Any

import orjson


def json_text(document: Any) -> bytes:
    """Return the JSON text of `document`; whole numbers may have any size.

    The fast encoder stops at 64 bits, and a number beyond them is the caller's mistake, to be refused in words.
    """
    try:
        return orjson.dumps(document)
    except TypeError:
        return json.dumps(document).encode()
