"""An HTTP/1.1 client that costs little next to what it measures: bytes made once, one connection kept."""

import re
import socket
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from contextlib import closing
from time import perf_counter

from benchmarks.servers import HOST

HEAD_END = b"\r\n\r\n"
LENGTH = re.compile(rb"\r\ncontent-length: *(\d+)", re.IGNORECASE)
OK = b"HTTP/1.1 200"
PIECE = 1 << 16  # bytes read at a time
TIMEOUT = 120.0  # seconds


def request_of(method: str, path: str, body: bytes = b"", content_type: str = "") -> bytes:
    """Return the bytes of a request."""
    lines = [f"{method} {path} HTTP/1.1", f"host: {HOST}", "accept: application/json"]
    if body:
        lines += [f"content-type: {content_type}", f"content-length: {len(body)}"]
    return "\r\n".join(lines).encode() + HEAD_END + body


class Connection:
    """One connection to a server on this machine."""

    def __init__(self, port: int) -> None:
        self._socket = socket.create_connection((HOST, port), TIMEOUT)
        self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)

    def close(self) -> None:
        """Hang up."""
        self._socket.close()

    def answer(self, request: bytes) -> bytes:
        """Send a request and return the body of its answer, which must be a success of known length."""
        self._socket.sendall(request)
        data = self._socket.recv(PIECE)
        while (end := data.find(HEAD_END)) < 0:
            data += self._more()
        if not data.startswith(OK):
            raise RuntimeError(f"the server answers {data[:1000]!r}")
        length = LENGTH.search(data, 0, end + 2)
        if length is None:
            raise RuntimeError("an answer without a content-length")
        stop = end + len(HEAD_END) + int(length[1])
        while len(data) < stop:
            data += self._more()
        return data[end + len(HEAD_END) : stop]

    def _more(self) -> bytes:
        piece = self._socket.recv(PIECE)
        if not piece:
            raise ConnectionError("the server hung up in the middle of an answer")
        return piece


def calling(connection: Connection, request: bytes) -> Callable[[], bytes]:
    """Return the work of sending `request` and taking its answer."""
    return lambda: connection.answer(request)


def latencies(port: int, request: bytes, *, seconds: float) -> list[float]:
    """Return the seconds that each of many requests takes, one after the other on one connection."""
    found = []
    with closing(Connection(port)) as connection:
        connection.answer(request)
        began = last = perf_counter()
        while last - began < seconds:
            connection.answer(request)
            now = perf_counter()
            found.append(now - last)
            last = now
    return found


def per_second(port: int, request: bytes, *, seconds: float, connections: int = 1) -> float:
    """Return how many requests are answered a second, each connection sending the next when it has its answer."""
    with ThreadPoolExecutor(connections) as pool:
        each = pool.map(lambda _: latencies(port, request, seconds=seconds), range(connections))
        return sum(len(found) / sum(found) for found in each)
