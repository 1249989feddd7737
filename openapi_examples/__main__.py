"""Send every example to a running app and write its answer."""

import socket
from threading import Thread
from time import sleep

import httpx
import uvicorn

from openapi_examples import FOLDER, examples
from service.app import create_app
from service.settings import Settings

with socket.create_server(("127.0.0.1", 0)) as listener:
    server = uvicorn.Server(uvicorn.Config(create_app(Settings()), log_config=None, access_log=False))
    thread = Thread(target=server.run, kwargs={"sockets": [listener]})
    thread.start()
    try:
        while not server.started and thread.is_alive():
            sleep(0.01)
        with httpx.Client(base_url=f"http://127.0.0.1:{listener.getsockname()[1]}", timeout=60) as client:
            for example in examples():
                response = example.send(client)
                if response.is_error:
                    raise SystemExit(f"{example.name}: {response.text}")
                (FOLDER / example.response).write_bytes(response.content)
                print(f"{example.response}: {len(response.content):,} bytes")
    finally:
        server.should_exit = True
        thread.join()
