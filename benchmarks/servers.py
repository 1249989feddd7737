"""Servers in processes of their own, on free ports of the loopback interface."""

import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import AbstractContextManager, contextmanager
from pathlib import Path

CHECKOUT = Path(__file__).parent.parent
HOST = "127.0.0.1"
PATIENCE = 30.0  # seconds until a server must answer, or have stopped
AGAIN = 0.05  # seconds between two looks


@contextmanager
def serving(*arguments: str) -> Iterator[int]:
    """Run ``python -m <arguments> --port <free port>`` and give the port once it listens."""
    port = _free_port()
    command = [sys.executable, "-m", *arguments, "--host", HOST, "--port", str(port)]
    process = subprocess.Popen(  # noqa: S603  # our own interpreter and modules
        command, cwd=CHECKOUT, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
    )
    try:
        _wait(process, port)
        yield port
    finally:
        process.terminate()
        try:
            process.wait(PATIENCE)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait()


def tailrace(*, workers: int = 1) -> AbstractContextManager[int]:
    """Serve as a user would start it."""
    return serving("service", "serve", "--workers", str(workers))


def rivals() -> AbstractContextManager[int]:
    """Serve the routes that tailrace is measured against, by the same server, without its access log."""
    return serving("uvicorn", "benchmarks.rivals:app", "--no-access-log", "--log-level", "warning")


def _free_port() -> int:
    with socket.create_server((HOST, 0)) as found:
        port: int = found.getsockname()[1]
    return port


def _wait(process: subprocess.Popen[bytes], port: int) -> None:
    until = time.monotonic() + PATIENCE
    while time.monotonic() < until:
        if process.poll() is not None:
            raise RuntimeError(f"the server ended with code {process.returncode}")
        try:
            socket.create_connection((HOST, port), AGAIN).close()
        except OSError:
            time.sleep(AGAIN)
        else:
            return
    raise TimeoutError("the server does not listen")
