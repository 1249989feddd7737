"""Health, limits, metrics and pages over HTTP."""

import re
from dataclasses import fields

import httpx
import pytest

from service import errors, problems
from service.openapi import committed
from service.pages import docs
from service.representations.page import LINKS, POLICY
from service.settings import Settings, variable
from tests.serving import assert_problem, running

PAGES = ["/", "/problems", "/problems/busy", "/docs"]
PATHS = [
    *PAGES,
    "/healthz",
    "/readyz",
    "/metrics",
    "/v1/limits",
    "/openapi.json",
    "/docs/start.js",
    *(f"/docs/{name}" for name in docs.ASSETS),
]


@pytest.fixture(scope="module")
def client():
    with running(max_cells=1234) as client:
        yield client


@pytest.mark.parametrize("path", PATHS)
def test_get_head_and_options(client, path):
    got, head, options = client.get(path), client.head(path), client.options(path)
    assert got.status_code == head.status_code == 200
    assert got.content
    assert head.content == b""
    assert head.headers["content-type"] == got.headers["content-type"]
    if path != "/metrics":  # its length changes with every request
        assert head.headers["content-length"] == str(len(got.content))
    assert options.status_code == 204
    assert options.headers["allow"] == "GET, HEAD, OPTIONS"


@pytest.mark.parametrize("path", PATHS)
@pytest.mark.parametrize("method", ["POST", "QUERY", "DELETE"])
def test_other_methods(client, path, method):
    response = client.request(method, path)
    assert_problem(response, "method_not_allowed")
    assert response.headers["allow"] == "GET, HEAD, OPTIONS"


@pytest.mark.parametrize("path", ["/nothing", "/v1/limits/", "//", "/problems/nothing", "/docs/redoc.standalone.js"])
def test_nothing_here(client, path):
    # the whole address, since a client would take // for a host
    assert_problem(client.get(httpx.URL(f"{client.base_url}".rstrip("/") + path)), "not_found")


@pytest.mark.parametrize("path", PAGES)
def test_pages_fetch_nothing_from_outside(client, path):
    page = client.get(path)
    assert page.headers["content-type"] == "text/html; charset=utf-8"
    assert "default-src 'none'" in page.headers["content-security-policy"]
    addresses = re.findall(r"""(?:src|href)="([^"]*)\"""", page.text)
    assert addresses
    assert all(address.startswith(("/", "#", "data:")) and not address.startswith("//") for address in addresses)
    assert "http" not in page.text.replace("http-equiv", "")


@pytest.mark.parametrize("path", PAGES)
def test_links_of_pages_lead_somewhere(client, path):
    for address in set(re.findall(r'href="(/[^"]*)"', client.get(path).text)):
        assert client.get(address).status_code == 200, address


@pytest.mark.parametrize("path", PAGES)
def test_every_page_leads_to_all_others(client, path):
    page = client.get(path)
    assert [f'href="{address}"' in page.text for address, _ in LINKS] == [True] * len(LINKS)
    if path != "/docs":
        assert page.headers["content-security-policy"] == POLICY


def test_limits_are_the_settings(client):
    rows = {row["name"]: row for row in client.get("/v1/limits").json()}
    assert rows.keys() == {spec.name for spec in fields(Settings) if spec.name.startswith("max_")}
    assert rows["max_cells"] == {
        "name": "max_cells",
        "value": 1234,
        "unit": "cells",
        "setting": "TAILRACE_MAX_CELLS",
    }
    assert all(row["setting"] == variable(name) for name, row in rows.items())


def test_every_problem_has_a_page(client):
    for code, status in problems.STATUSES.items():
        page = client.get(f"/problems/{code}").text
        assert f"<code>{code}</code>, status {status}" in page
        record = client.get(f"/problems/{code}", headers={"accept": "application/json"}).json()
        assert record["code"] == code
        assert record["status"] == status
        assert record["meaning"]
        assert record["remedy"]
    index = client.get("/problems", headers={"accept": "application/json"})
    assert [row["code"] for row in index.json()] == list(problems.STATUSES)
    assert index.headers["vary"] == "Accept"


def test_the_document_is_the_committed_one(client):
    response = client.get("/openapi.json")
    assert response.content == committed()
    assert response.json()["openapi"].startswith("3.1")


def test_health_is_not_stored(client):
    for path, status in (("/healthz", "alive"), ("/readyz", "ready")):
        response = client.get(path)
        assert response.json() == {"status": status}
        assert response.headers["cache-control"] == "no-store"


def test_metrics_are_labelled_by_template(client):
    client.get("/problems/busy")
    client.get("/nothing/secret")
    client.request("LOCK", "/healthz")
    text = client.get("/metrics").text
    assert 'method="GET",route="/problems/{code}",status="200"' in text
    assert 'method="GET",route="none",status="404"' in text
    assert 'method="other",route="/healthz",status="405"' in text
    assert 'tailrace_refused_total{reason="not_found"}' in text
    assert "tailrace_calculations_in_flight 0.0" in text
    assert "secret" not in text


def test_every_error_class_has_a_status_and_a_page():
    waiting, seen = [errors.TailraceError], []
    while waiting:
        kind = waiting.pop()
        waiting += kind.__subclasses__()
        seen.append(kind)
    coded = [kind for kind in seen if "code" in vars(kind)]
    assert len(coded) > 12
    for kind in coded:
        assert kind in problems.PROBLEMS, f"{kind.__name__} has no row in problems.py"
        assert kind.code in problems.PROBLEM_PAGES, f"{kind.code} has no page"
    assert problems.STATUSES.keys() == problems.PROBLEM_PAGES.keys()


def test_what_stays_the_same_is_not_sent_again(client):
    for path in ("/", "/spreadsheets", "/docs", "/v1/limits", "/v1/limits.json", "/openapi.json"):
        first = client.get(path)
        assert first.headers["cache-control"] == "private, no-cache"
        assert first.headers["vary"] == "Accept"
        again = client.get(path, headers={"if-none-match": first.headers["etag"]})
        assert (again.status_code, again.content) == (304, b"")


@pytest.mark.parametrize(
    "path",
    ["/", "/v1/limits", "/healthz", "/readyz", "/metrics", "/problems", "/openapi.json", "/docs", "/spreadsheets"],
)
def test_parameters_without_meaning_are_refused(client, path):
    assert client.get(path, params={"refresh": "2"}).status_code == 200
    assert_problem(client.get(path, params={"level": "0.99"}), "invalid_value", parameter="level")
