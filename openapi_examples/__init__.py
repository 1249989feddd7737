"""Requests and their answers: shown in the API document, sent by the tests.

``index.json`` says of each example what it shows and how it is sent; ``python -m openapi_examples`` sends all of
them to a running app and writes the answers anew.
"""

import json
from dataclasses import dataclass
from pathlib import Path

import httpx

FOLDER = Path(__file__).parent


@dataclass(frozen=True, slots=True, kw_only=True)
class Example:
    """One row of the index."""

    name: str
    title: str
    shows: str
    """What a reader learns from it."""
    calculation: str
    content_type: str
    query: str
    accept: str
    """Media type of the answer."""
    request: str
    """File with the body that is sent."""
    response: str
    """File with the body that comes back."""

    @property
    def answer(self) -> bytes:
        """The answer as kept."""
        return (FOLDER / self.response).read_bytes()

    @property
    def body(self) -> bytes:
        """The body of the request."""
        return (FOLDER / self.request).read_bytes()

    def send(self, client: httpx.Client) -> httpx.Response:
        """Send the request to the service that `client` speaks to."""
        headers = {"content-type": self.content_type, "accept": self.accept}
        return client.post(f"/v1/{self.calculation}?{self.query}".rstrip("?"), content=self.body, headers=headers)


def examples() -> list[Example]:
    """Return all examples, in the order of the index."""
    return [Example(**row) for row in json.loads((FOLDER / "index.json").read_bytes())]
