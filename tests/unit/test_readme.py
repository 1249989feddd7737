"""What README.md, DEVELOPERS.md and CHANGELOG.md say is so: requests, answers, files, paths, settings."""

import json
import re
import subprocess
import sys

import pytest

from openapi_examples.readme import FENCE, README, SERVER, pretty, renewed, shown
from service import cli
from service.settings import Settings, fields, variable
from tests.serving import alike, running

ROOT = README.parent
TEXT = README.read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
CHANGELOG = (ROOT / "CHANGELOG.md").read_text(encoding="utf-8")
SHOWN = shown(TEXT)
ANSWERED = [one for one in SHOWN if one.answer is not None]
FILE = re.compile(r"`([\w.-][\w./-]*(?:\.(?:csv|json|lock|md|py|toml|ts|yaml)|[\w-]/))`")
PATH = re.compile(r"`(/[\w./{}-]*)`")
IN_THE_MAP = re.compile(r"^( *)([\w./]+(?:, [\w./]+)*)(?:  +|$)", re.MULTILINE)


@pytest.fixture(scope="module")
def client():
    with running() as client:
        yield client


def test_the_first_request_has_its_answer():
    assert SHOWN[0].answer is not None
    assert "/v1/allocations" in SHOWN[0].command
    assert "<!--" not in TEXT


@pytest.mark.parametrize("number", range(len(ANSWERED)))
def test_the_printed_answers_are_those_of_the_service(client, number):
    response = ANSWERED[number].send(client)
    assert response.status_code == 200, response.text
    assert alike(json.loads(ANSWERED[number].answer), response.json()), (
        "another answer than the one printed; if it is meant, run: python -m openapi_examples"
    )


def test_each_question_is_asked_and_answered():
    asked = [re.search(r"/v1/(\w+)", one.command)[1] for one in ANSWERED]
    assert asked == ["allocations", "increments", "comparisons"]


def test_the_table_goes_in_and_comes_out_as_csv(client):
    tables = [one for one in SHOWN if "text/csv" in one.command]
    assert len(tables) == 1
    response = tables[0].send(client)
    assert response.status_code == 200, response.text
    assert response.headers["content-type"].startswith("text/csv")
    lines = response.text.splitlines()
    header = (ROOT / "service/demo/ternholm.csv").read_text().partition("\n")[0].split(",")
    assert [line.split(",")[4].strip('"') for line in lines[2:]] == header


def test_requests_shown_without_curl_are_answered(client):
    printed = {one.answer for one in ANSWERED}
    requests = [fence[2] for fence in FENCE.finditer(TEXT) if fence[1] == "json" and fence[2] not in printed]
    assert requests
    for request in requests:
        response = client.post("/v1/allocations", json=json.loads(request))
        assert response.status_code == 200, response.text


def test_the_events_come(client):
    streams = [one for one in SHOWN if "text/event-stream" in one.command]
    assert len(streams) == 1
    response = streams[0].send(client)
    assert response.headers["content-type"] == "text/event-stream"
    assert response.text.count("event: result\n") == 1


def test_python_as_shown(client):
    code = next(fence[2] for fence in FENCE.finditer(TEXT) if fence[1] == "python")
    assert SERVER in code
    code = code.replace(SERVER, f"{client.base_url}".rstrip("/"))
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60, check=False)
    assert done.returncode == 0, done.stderr
    assert [line.split()[0] for line in done.stdout.splitlines()] == ["ferry", "storm"]
    assert sum(float(line.split()[1]) for line in done.stdout.splitlines()) == pytest.approx(3.0, rel=1e-12)


def test_answers_can_be_renewed():
    text = "a\n```sh\ncurl -s X\n```\n\n```json\n{}\n```\n\n```sh\ncurl -s Y\n```\n## Next\n```json\n[]\n```\n"
    assert [one.answer for one in shown(text)] == ["{}\n", None]
    assert renewed(text, lambda one: {"x": one.command}).count('{"x": "curl -s X\\n"}\n```') == 1
    assert renewed(text, lambda _one: {}) == text
    long = {"a": ["b" * 60, "c" * 60], "d": {}}
    assert json.loads(pretty(long)) == long
    assert max(map(len, pretty(long).splitlines())) < 80


def test_help_names_every_setting(capsys, monkeypatch):
    assert "`tailrace serve --help` lists every setting" in TEXT
    monkeypatch.setenv("COLUMNS", "500")
    with pytest.raises(SystemExit):
        cli.main(["serve", "--help"])
    told = capsys.readouterr().out
    for spec in fields(Settings):
        assert f"--{spec.name.replace('_', '-')} " in told
        assert variable(spec.name) in told


@pytest.mark.parametrize("text", [TEXT, DEVELOPERS], ids=["README", "DEVELOPERS"])
def test_files_that_are_named_exist(text):
    named = FILE.findall(text) + re.findall(r"\]\(([\w./-]+)\)", text)
    assert named
    places = (ROOT, ROOT / "service", ROOT / "service/risk")
    made_up = {"request.json"}  # what a reader would call a file of his own
    missing = [name for name in named if name not in made_up and not any((place / name).exists() for place in places)]
    assert not missing


def test_paths_that_are_named_are_served(client):
    for path in PATH.findall(TEXT):
        assert client.options(path).status_code == 204, path


def test_the_map_shows_what_is_there():
    folders = [ROOT]
    tree = re.search(r"^## The map\n+```\n(.*?)^```", DEVELOPERS, re.MULTILINE | re.DOTALL)[1]
    found = IN_THE_MAP.findall(tree)
    assert len(found) > 20
    for indent, names in found:
        depth = len(indent) // 2
        del folders[depth + 1 :]
        for name in names.split(", "):
            assert (folders[depth] / name).exists(), f"{folders[depth]}/{name}"
        folders.append(folders[depth] / names.split(", ")[0])


def test_the_changelog_has_room_for_the_next_change():
    headings = re.findall(r"^## (.*)$", CHANGELOG, re.MULTILINE)
    assert headings[0] == "Unreleased"
