"""The requests in README.md, and the answers printed behind them."""

import json
import re
import shlex
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import httpx

README = Path(__file__).parents[1] / "README.md"
FENCE = re.compile(r"^```(\w+)\n(.*?)^```$", re.MULTILINE | re.DOTALL)
SERVER = "http://127.0.0.1:8000"
WIDTH = 118


@dataclass(frozen=True, slots=True)
class Shown:
    """A request by curl, and the JSON answer in the next fence of its section, if there is one."""

    command: str
    answer: str | None
    start: int
    """Where the answer begins in the text."""

    def send(self, client: httpx.Client) -> httpx.Response:
        """Send what curl would send, to the service that `client` speaks to."""
        words = iter(shlex.split(self.command.replace("\\\n", " "))[1:])
        headers: dict[str, str] = {}
        body, path = b"", ""
        for word in words:
            if word == "-H":
                name, _, value = next(words).partition(":")
                headers[name.strip()] = value.strip()
            elif word in ("-d", "--data-binary"):
                given = next(words)
                body = (README.parent / given[1:]).read_bytes() if given.startswith("@") else given.encode()
            elif word.startswith(SERVER):
                path = word.removeprefix(SERVER)
            elif word not in ("-s", "-sN"):
                raise ValueError(f"README.md uses curl with {word}, which is not known here")
        return client.request("POST" if body else "GET", path, content=body, headers=headers)


def shown(text: str) -> list[Shown]:
    """Return the requests by curl that `text` shows."""
    fences = list(FENCE.finditer(text))
    found = []
    for fence, following in zip(fences, [*fences[1:], None], strict=True):
        if fence[1] == "sh" and fence[2].startswith("curl "):
            if following and following[1] == "json" and "\n#" not in text[fence.end() : following.start()]:
                found.append(Shown(fence[2], following[2], following.start(2)))
            else:
                found.append(Shown(fence[2], None, fence.end()))
    return found


def renewed(text: str, ask: Callable[[Shown], Any]) -> str:
    """Return `text` with each answer replaced by what `ask` says of its request."""
    for one in reversed(shown(text)):
        if one.answer is not None:
            text = text[: one.start] + pretty(ask(one)) + "\n" + text[one.start + len(one.answer) :]
    return text


def pretty(node: Any, indent: str = "") -> str:
    """Return JSON for people: what fits stands on one line."""
    flat = json.dumps(node, ensure_ascii=False)
    if len(flat) + len(indent) <= WIDTH or not isinstance(node, dict | list):
        return flat
    deeper = indent + "  "
    if isinstance(node, list):
        return "[\n" + ",\n".join(deeper + pretty(one, deeper) for one in node) + f"\n{indent}]"
    members = (f"{deeper}{json.dumps(name)}: {pretty(value, deeper)}" for name, value in node.items())
    return "{\n" + ",\n".join(members) + f"\n{indent}}}"
