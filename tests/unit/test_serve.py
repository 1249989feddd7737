"""``tailrace serve`` as a process: settings, ports, workers, and a stop that lets work finish."""

import json
import os
import re
import signal
import socket
import subprocess
import sys
from contextlib import contextmanager
from dataclasses import fields
from threading import Thread
from time import monotonic, sleep

import httpx
import pytest

from service import __version__
from service.settings import Settings, variable
from tests.serving import SMALL, assert_problem

SLOW = """
import sys, time
from service import calculate
answer = calculate.answer
def slow(*arguments):
    print("computing", file=sys.stderr, flush=True)
    time.sleep({seconds})
    return answer(*arguments)
calculate.answer = slow
"""
BODY = json.dumps(SMALL).encode() + b" " * 200_000  # long enough for a thread


def command(*arguments, before="", **environment):
    """Run tailrace as the script does, after the code in `before`."""
    kept = {name: value for name, value in os.environ.items() if not name.startswith("TAILRACE_")}
    code = f"import sys\n{before}\nfrom service.cli import main\nsys.exit(main())"
    return subprocess.Popen(
        [sys.executable, "-c", code, *arguments],
        env={**kept, **environment},
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )


@contextmanager
def serving(*arguments, **options):
    process = command("serve", "--port", "0", *arguments, **options)
    try:
        address = re.search(r"http://\S+", process.stderr.readline())[0]
        with httpx.Client(base_url=address, timeout=20) as client:
            deadline = monotonic() + 30
            while monotonic() < deadline:
                try:
                    client.get("/healthz")
                    break
                except httpx.TransportError:
                    sleep(0.05)
            yield process, client
    finally:
        process.terminate()
        process.communicate(timeout=30)


def end(*arguments, **environment):
    process = command(*arguments, **environment)
    output, complaint = process.communicate(timeout=30)
    return process.returncode, output, complaint


def test_version_and_help():
    assert end("--version")[:2] == (0, f"tailrace {__version__}\n")
    code, output, _ = end("serve", "--help", COLUMNS="200")
    assert code == 0
    for name in ("host", "port", "workers", *(spec.name for spec in fields(Settings))):
        assert f"--{name.replace('_', '-')}" in output
        assert variable(name) in output


def test_help_does_not_wait_for_heavy_parts():
    heavy = "import atexit; atexit.register(lambda: print({'numpy', 'fastapi', 'pydantic'} & sys.modules.keys()))"
    process = command("--help", before=heavy)
    assert process.communicate(timeout=30)[0].endswith("set()\n")


@pytest.mark.parametrize(
    ("arguments", "environment", "words"),
    [
        ((), {"TAILRACE_MAX_SECONDS": "soon"}, "TAILRACE_MAX_SECONDS is 'soon', not a number of seconds"),
        ((), {"TAILRACE_MAX_CELL": "5"}, "unknown setting TAILRACE_MAX_CELL"),
        ((), {"TAILRACE_PORT": "http"}, "TAILRACE_PORT is 'http', not a whole number from 0 to 65535"),
        (("--workers", "0"), {}, "TAILRACE_WORKERS is '0', not a whole number from 1"),
        (("--threads", "0"), {}, "TAILRACE_THREADS is 0, but at least 1 is needed"),
        (("--max-seconds", "nan"), {"TAILRACE_MAX_SECONDS": "5"}, "TAILRACE_MAX_SECONDS is nan"),
    ],
)
def test_bad_settings_end_with_a_sentence(arguments, environment, words):
    code, output, complaint = end("serve", *arguments, **environment)
    assert code == 2
    assert output == ""
    assert words in complaint
    assert complaint.startswith("tailrace: ")
    assert complaint.count("\n") == 1


def test_a_port_in_use_ends_with_a_sentence():
    with socket.create_server(("127.0.0.1", 0)) as taken:
        code, _, complaint = end("serve", "--port", str(taken.getsockname()[1]))
    assert code == 1
    assert "cannot listen on 127.0.0.1 port" in complaint
    assert complaint.count("\n") == 1


def test_options_and_variables_reach_the_app():
    with serving("--max-cells", "77", TAILRACE_MAX_CELLS="5", TAILRACE_MAX_GROUPS="6") as (_, client):
        rows = {row["name"]: row["value"] for row in client.get("/v1/limits").json()}
        assert rows["max_cells"] == 77
        assert rows["max_groups"] == 6
        assert "server" not in client.get("/healthz").headers


def test_told_to_stop_it_finishes_what_runs():
    with serving(before=SLOW.format(seconds=1.0)) as (process, client):
        answers = []
        sender = Thread(
            target=lambda: answers.append(
                client.post("/v1/measures", content=BODY, headers={"content-type": "application/json"})
            )
        )
        sender.start()
        assert process.stderr.readline() == "computing\n"
        process.send_signal(signal.SIGTERM)
        sender.join(20)
        output, complaint = process.communicate(timeout=20)
        assert answers[0].status_code == 200
        assert process.returncode == 0
        assert complaint == ""
        lines = [json.loads(line) for line in output.splitlines()]
        assert any(line.get("route") == "/v1/measures" and line["status"] == 200 for line in lines)
        assert all(line["level"] == "info" for line in lines)


def test_it_does_not_wait_for_ever():
    with serving("--stop-seconds", "1", before=SLOW.format(seconds=4)) as (process, client):
        answers = []
        sender = Thread(
            target=lambda: answers.append(
                client.post("/v1/measures", content=BODY, headers={"content-type": "application/json"})
            )
        )
        sender.start()
        assert process.stderr.readline() == "computing\n"
        process.send_signal(signal.SIGTERM)
        began = monotonic()
        sender.join(20)
        assert monotonic() - began < 3.5
        assert_problem(answers[0], "busy")
        output, _ = process.communicate(timeout=20)
        assert process.returncode == 0
        assert "Traceback" not in output


def test_several_workers():
    with serving("--workers", "2") as (process, client):
        response = client.post("/v1/measures", json=SMALL)
        assert response.status_code == 200
        process.send_signal(signal.SIGTERM)
        output, _ = process.communicate(timeout=30)
        assert process.returncode == 0
        started = re.findall(r"Started server process \[(\d+)\]", output)
        assert len(set(started)) == 2
