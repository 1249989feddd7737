"""Open data through the running service, in every form a table can be sent in.

Source of the figures: our own evaluation of the data (mark: own; see data/README.md for where the data
are from); quantiles also by numpy's inverted_cdf.
"""

import base64
import csv
import hashlib
import json

import numpy as np
import pyarrow as pa
import pytest

from tests.reference.laws import DATA, rows
from tests.serving import running

HEADLINES = {row["series"]: row for row in rows("o_datasets_headline")}
LEVELS = (0.95, 0.975, 0.99)


def _columns(name):
    with (DATA / f"{name}.csv").open(newline="") as file:
        header, *lines = csv.reader(file)
    return header, np.array(lines, dtype=np.float64)


@pytest.mark.parametrize(
    ("name", "digest"),
    [
        ("european_indices_1991_1998", "3dda07f77a7ef02e"),
        ("danish_fire_1980_1990", "916322c6609e01b6"),
        ("liability_loss_alae", "d003ab71b092278e"),
    ],
)
def test_the_data_are_those_of_the_readme(name, digest):
    _, values = _columns(name)
    assert hashlib.sha256(values.astype("<f8").tobytes()).hexdigest()[:16] == digest


def _european_indices():
    names, prices = _columns("european_indices_1991_1998")
    return names, -np.diff(np.log(prices), axis=0) / 4.0


def _liability():
    return _columns("liability_loss_alae")


def _fires():
    return _columns("danish_fire_1980_1990")


@pytest.fixture(scope="module")
def client():
    with running() as made:
        yield made


MEASURES = [{"kind": kind, "level": level} for kind in ("value_at_risk", "expected_shortfall") for level in LEVELS]


def _envelope(names, **table):
    losses = {"kind": "scenarios", **table}
    if "part" not in table:
        losses["sub_portfolios"] = [{"id": name} for name in names]
    return {"losses": losses, "measures": MEASURES}


def _csv(names, losses):
    lines = [",".join(names), *(",".join(map(repr, row)) for row in losses.tolist())]
    return ("\r\n".join(lines) + "\r\n").encode()


def _arrow(names, losses):
    table = pa.table({name: losses[:, j] for j, name in enumerate(names)})
    sink = pa.BufferOutputStream()
    with pa.ipc.new_stream(sink, table.schema) as writer:
        writer.write_table(table)
    return sink.getvalue().to_pybytes()


def _query():
    return [
        *(("measure", kind) for kind in ("value_at_risk", "expected_shortfall")),
        *(("level", str(level)) for level in LEVELS),
    ]


def _json(client, names, losses):
    return client.post("/v1/allocations", json=_envelope(names, values=losses.tolist()))


def _by_sub_portfolio(client, names, losses):
    return client.post("/v1/allocations", json=_envelope(names, values=losses.T.tolist(), layout="by_sub_portfolio"))


def _as_profits(client, names, losses):
    return client.post("/v1/allocations", json=_envelope(names, values=(-losses).tolist(), sign="profit"))


def _packed(client, names, losses):
    data = base64.b64encode(losses.astype("<f8").tobytes()).decode()
    packed = {"data": data, "dtype": "float64", "rows": losses.shape[0], "columns": losses.shape[1]}
    return client.post("/v1/allocations", json=_envelope(names, packed=packed))


def _equal_probabilities(client, names, losses):
    n = losses.shape[0]
    return client.post("/v1/allocations", json=_envelope(names, values=losses.tolist(), probabilities=[1.0 / n] * n))


def _csv_body(client, names, losses):
    return client.post(
        "/v1/allocations", params=_query(), content=_csv(names, losses), headers={"content-type": "text/csv"}
    )


def _arrow_body(client, names, losses):
    headers = {"content-type": "application/vnd.apache.arrow.stream"}
    return client.post("/v1/allocations", params=_query(), content=_arrow(names, losses), headers=headers)


def _multipart(client, names, losses, table, media_type):
    files = [
        ("request", (None, json.dumps(_envelope(names, part="table")).encode(), "application/json")),
        ("table", ("losses", table(names, losses), media_type)),
    ]
    return client.post("/v1/allocations", files=files)


def _multipart_csv(client, names, losses):
    return _multipart(client, names, losses, _csv, "text/csv")


def _multipart_arrow(client, names, losses):
    return _multipart(client, names, losses, _arrow, "application/vnd.apache.arrow.stream")


FORMS = (
    _json,
    _by_sub_portfolio,
    _as_profits,
    _packed,
    _equal_probabilities,
    _csv_body,
    _arrow_body,
    _multipart_csv,
    _multipart_arrow,
)
SETS = (_european_indices, _liability, _fires)


def _answered(response):
    assert response.status_code == 200, response.text
    return response.json()


@pytest.mark.parametrize("data", SETS)
def test_every_form_of_a_table_gives_the_same_answer(client, data):
    names, losses = data()
    answers = [_answered(form(client, names, losses)) for form in FORMS]
    digests = {answer["provenance"]["losses_digest"] for answer in answers}
    assert len(digests) == 1
    assert digests.pop().startswith("sha-256:")
    for answer in answers:  # pointers lead into the caller's document, and only JSON has one
        for note in answer["notes"]:
            note.pop("pointer")
    assert all(answer == answers[0] for answer in answers[1:])


def _found(answer):
    """Return the answer's allocations by (kind, level)."""
    keys = [(one["kind"], one["level"]) for one in MEASURES]
    return dict(zip(keys, answer["allocations"], strict=True))


def _printed(text):
    """Return the number that a file gives, with half a unit of its last digit (at least of its tenth)."""
    digits = text.lstrip("-0.").replace(".", "")
    magnitude = 10.0 ** np.floor(np.log10(abs(float(text))))
    return pytest.approx(float(text), abs=0.51 * magnitude * 10.0 ** (1 - max(len(digits), 10)))


def _check_headline(series, figure_of, mean=None):
    row = HEADLINES[series]
    for level in LEVELS:
        percent = f"{level:.1%}".removesuffix("%").removesuffix(".0")
        assert figure_of("value_at_risk", level) == _printed(row[f"var_inverted_cdf_{percent}"])
        assert figure_of("expected_shortfall", level) == _printed(row[f"es_{percent}"])
    if mean is not None:
        assert mean == _printed(row["mean_loss"])


# contributions to expected shortfall of the equal-weight sum, as printed: eight decimals or fewer
EUROPE = {
    0.975: {"DAX": 0.00686292, "SMI": 0.00592944, "CAC": 0.00647041, "FTSE": 0.00462474},
    0.99: {"DAX": 0.0087871, "SMI": 0.0078022, "CAC": 0.00782941, "FTSE": 0.0055249},
}


def test_european_index_returns(client):
    """Four sub-portfolios: a quarter of the negative log return of each of four share indices, 1991 to 1998."""
    names, losses = _european_indices()
    answer = _answered(_packed(client, names, losses))
    found = _found(answer)
    _check_headline(
        "EuStockMarkets equal-weight sum of four -log returns /4",
        lambda kind, level: found[kind, level]["total"]["value"],
        answer["expected_loss"]["value"],
    )
    for number, name in enumerate(names):
        _check_headline(
            f"EuStockMarkets {name} -log returns",
            lambda kind, level, number=number: (
                4.0 * found[kind, level]["sub_portfolios"][number]["stand_alone"]["value"]
            ),
            4.0 * found["value_at_risk", 0.95]["sub_portfolios"][number]["expected_loss"],
        )
    for level, expected in EUROPE.items():
        contributions = {
            row["id"]: row["contribution"]["value"] for row in found["expected_shortfall", level]["sub_portfolios"]
        }
        assert contributions == pytest.approx(expected, abs=0.51e-8)
        total = found["expected_shortfall", level]["total"]["value"]
        assert sum(contributions.values()) == pytest.approx(total, abs=1e-12 * total)
    assert found["expected_shortfall", 0.975]["total"]["value"] == pytest.approx(0.02388752377, abs=0.51e-11)


def test_liability_losses_and_their_expense(client):
    """Two sub-portfolios: 1,500 indemnity payments and their allocated loss adjustment expense."""
    names, losses = _liability()
    answer = _answered(_csv_body(client, names, losses))
    found = _found(answer)
    _check_headline(
        "lossalae Loss+ALAE (USD)",
        lambda kind, level: found[kind, level]["total"]["value"],
        answer["expected_loss"]["value"],
    )
    for number, series in enumerate(("lossalae Loss (USD)", "lossalae ALAE (USD)")):
        _check_headline(
            series,
            lambda kind, level, number=number: found[kind, level]["sub_portfolios"][number]["stand_alone"]["value"],
            found["value_at_risk", 0.95]["sub_portfolios"][number]["expected_loss"],
        )


def test_danish_fire_losses(client):
    names, losses = _fires()
    answer = _answered(_json(client, names, losses))
    found = _found(answer)
    _check_headline(
        "danish fire losses (DKK m)",
        lambda kind, level: found[kind, level]["total"]["value"],
        answer["expected_loss"]["value"],
    )
    totals = [found["value_at_risk", level]["total"]["value"] for level in LEVELS]
    assert totals == np.quantile(losses[:, 0], LEVELS, method="inverted_cdf").tolist()
    for one in found.values():  # a single sub-portfolio is the whole book
        (row,) = one["sub_portfolios"]
        assert row["stand_alone"]["value"] == one["total"]["value"]
        assert row["stand_alone"]["standard_error"] == pytest.approx(one["total"]["standard_error"], rel=1e-12)
        assert row["contribution"]["value"] == pytest.approx(one["total"]["value"], rel=1e-12)
