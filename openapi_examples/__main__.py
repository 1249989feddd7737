"""Send every example, and the requests in README.md, to a running app and write their answers."""

import socket
from threading import Thread
from time import sleep

import httpx
import uvicorn

from openapi_examples import FOLDER, examples
from openapi_examples.readme import README, renewed
from service.app import create_app
from service.settings import Settings


def _good(name: str, response: httpx.Response) -> httpx.Response:
    if response.is_error:
        raise SystemExit(f"{name}: {response.text}")
    return response


def _write(client: httpx.Client) -> None:
    for example in examples():
        answer = _good(example.name, example.send(client)).content
        (FOLDER / example.response).write_bytes(answer)
        print(f"{example.response}: {len(answer):,} bytes")
    text = README.read_text(encoding="utf-8")
    text = renewed(text, lambda one: _good(one.command, one.send(client)).json())
    README.write_text(text, encoding="utf-8")


with socket.create_server(("127.0.0.1", 0)) as listener:
    server = uvicorn.Server(uvicorn.Config(create_app(Settings()), log_config=None, access_log=False))
    thread = Thread(target=server.run, kwargs={"sockets": [listener]})
    thread.start()
    try:
        while not server.started and thread.is_alive():
            sleep(0.01)
        with httpx.Client(base_url=f"http://127.0.0.1:{listener.getsockname()[1]}", timeout=60) as speaking:
            _write(speaking)
    finally:
        server.should_exit = True
        thread.join()
