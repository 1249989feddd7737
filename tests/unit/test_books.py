"""Books: what is one, what is seen of a change, and that nothing outside the folder is reached."""

import json
import os
from threading import Thread

import numpy as np
import pyarrow as pa
import pyarrow.parquet
import pytest

from openapi_examples import FOLDER
from service import cli, demo
from service.books import Books
from service.errors import NotDefined, NotFound
from service.executors import Work
from service.intake import read
from service.settings import Settings
from service.sources import source_of

WORK = Work()
CSV = "hull,cargo\n1,2\n3,-1\n5,6\n0,0.5\n"
TABLE = [[1.0, 2.0], [3.0, -1.0], [5.0, 6.0], [0.0, 0.5]]
FILED = {"kind": "scenarios", "file": "losses.csv", "currency": "EUR"}


@pytest.fixture
def folder(tmp_path):
    root = tmp_path / "books"
    root.mkdir()
    return root


@pytest.fixture
def books(folder):
    return Books(Settings(books=str(folder)))


def put(folder, name, content):
    path = folder / name
    path.write_text(content if isinstance(content, str) else json.dumps(content), "utf-8")
    older(path)


def older(path, seconds=10):
    """Let a file have settled long ago."""
    status = path.stat()
    os.utime(path, ns=(status.st_atime_ns, status.st_mtime_ns - seconds * 10**9))


def reason(books, name):
    with pytest.raises(NotDefined, match="is damaged") as caught:
        books.get(name, WORK)
    told = books.description(name, WORK)
    assert told.state == "damaged"
    assert told.reason in caught.value.detail
    assert told.sub_portfolios == []
    return told.reason


def source(losses):
    request = {"losses": losses, "measures": [{"kind": "expected_shortfall", "level": 0.5}]}
    taken = read(
        "measures", json.dumps(request).encode(), content_type="application/json", parameters=(), settings=Settings()
    )
    return source_of(taken.request.losses, taken.table, part=None, work=WORK, settings=Settings())


def test_a_source_with_a_csv_file(folder, books):
    put(folder, "port.json", FILED)
    put(folder, "losses.csv", CSV)
    book = books.get("port", WORK)
    np.testing.assert_array_equal(book.source.table.losses, TABLE)
    told = books.description("port", WORK)
    assert [one.id for one in told.sub_portfolios] == ["hull", "cargo"]
    assert (told.state, told.kind, told.scenarios, told.labels.currency) == ("ready", "scenarios", 4, "EUR")
    assert told.measures == ["value_at_risk 0.995", "expected_shortfall 0.99"]
    assert told.rules == ["euler"]
    parts = [{"id": "hull"}, {"id": "cargo"}]
    assert told.digest == source({"kind": "scenarios", "sub_portfolios": parts, "values": TABLE}).digest


def test_arrow_and_parquet_files_are_the_same_book(folder, books):
    table = pa.table({"hull": [row[0] for row in TABLE], "cargo": [row[1] for row in TABLE]})
    with pa.OSFile(str(folder / "t.arrow"), "wb") as file, pa.ipc.new_stream(file, table.schema) as writer:
        writer.write_table(table)
    pa.parquet.write_table(table, folder / "t.parquet")
    put(folder, "losses.csv", CSV)
    for kind in ("csv", "arrow", "parquet"):
        put(folder, f"{kind}.json", {**FILED, "file": "losses.csv" if kind == "csv" else f"t.{kind}"})
    assert len({books.get(kind, WORK).source.digest for kind in ("csv", "arrow", "parquet")}) == 1


def test_inline_values_packed_factors_and_history(folder, books):
    parts = [{"id": "hull"}, {"id": "cargo"}]
    component = [{"kind": "linear", "exposures": [{"factor": "rate", "amount": 2.0}]}]
    sources = {
        "inline": {"kind": "scenarios", "sub_portfolios": parts, "values": TABLE},
        "model": {
            "kind": "factors",
            "factors": [{"id": "rate", "marginal": {"family": "normal", "mean": 0, "standard_deviation": 1}}],
            "sub_portfolios": [{"id": "bonds", "components": component}],
            "simulation": {"scenarios": 1000},
        },
        "past": {
            "kind": "history",
            "factors": ["rate"],
            "changes": [[0.5], [-1.0], [2.0]],
            "sub_portfolios": [{"id": "bonds", "components": component}],
        },
    }
    for name, losses in sources.items():
        put(folder, f"{name}.json", losses)
        book = books.get(name, WORK)
        assert book.source.digest == source(losses).digest
    assert [one.scenarios for one in books.described(WORK)] == [4, 1000, 3]
    np.testing.assert_array_equal(books.get("past", WORK).source.table.losses[:, 0], [1.0, -2.0, 4.0])


def test_history_with_a_file(folder, books):
    component = [{"kind": "linear", "exposures": [{"factor": "rate", "amount": 2.0}]}]
    past = {"kind": "history", "factors": ["rate"], "sub_portfolios": [{"id": "bonds", "components": component}]}
    put(folder, "past.json", {**past, "file": "changes.csv"})
    put(folder, "changes.csv", "rate\n0.5\n-1\n2\n")
    assert books.get("past", WORK).source.digest == source({**past, "changes": [[0.5], [-1.0], [2.0]]}).digest


def test_a_whole_request_gives_the_defaults():
    book = Books(Settings(demo=True)).get("ternholm", WORK)
    told = book.description()
    assert told.measures == ["value_at_risk 0.995 above mean", "expected_shortfall 0.99"]
    assert told.group_by == ["entity", "line"]
    assert told.labels.reference == "Ternholm Mutual, third quarter, invented"
    assert (told.scenarios, len(told.sub_portfolios)) == (10000, 7)
    assert b'"part": "table"' in demo.request()


@pytest.mark.parametrize(
    "name", ["..", "../port", ".port", "", "a" * 65, "port.json", "port\0", "pört", "port\n", "-a"]
)
def test_other_names_are_not_found(folder, books, name):
    put(folder, "port.json", FILED)
    put(folder.parent, "port.json", FILED)
    with pytest.raises(NotFound):
        books.get(name, WORK)


def test_links_that_leave_the_folder_are_refused_and_links_within_are_not(folder, books):
    secret = folder.parent / "secret.json"
    secret.write_text(json.dumps({**FILED, "file": "losses.csv"}))
    outside = folder.parent / "outside.csv"
    outside.write_text(CSV)
    put(folder, "losses.csv", CSV)
    put(folder, "real.json", FILED)
    (folder / "within.json").symlink_to("real.json")
    (folder / "leaves.json").symlink_to(secret)
    (folder / "table.csv").symlink_to(outside)
    put(folder, "by_table.json", {**FILED, "file": "table.csv"})
    (folder / "dangling.json").symlink_to("nowhere.json")
    (folder / "sub").mkdir()
    (folder / "folder.json").mkdir()
    assert books.get("within", WORK).source.digest == books.get("real", WORK).source.digest
    assert "leads out of the folder" in reason(books, "leaves")
    assert "leads out of the folder" in reason(books, "by_table")
    assert "there is no file" in reason(books, "dangling")
    assert reason(books, "folder")
    states = {one.name: one.state for one in books.described(WORK)}
    assert states == {
        "by_table": "damaged",
        "dangling": "damaged",
        "folder": "damaged",
        "leaves": "damaged",
        "real": "ready",
        "within": "ready",
    }
    assert not any(str(folder.parent) in (one.reason or "") for one in books.described(WORK))


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="no pipes here")
def test_a_pipe_does_not_hang(folder, books):
    os.mkfifo(folder / "pipe.json")
    assert "not a file" in reason(books, "pipe")


@pytest.mark.parametrize(
    ("file", "words"),
    [
        ("../losses.csv", "plain name"),
        ("/etc/passwd", "plain name"),
        ("sub/losses.csv", "plain name"),
        ("..csv", "plain name"),
        ("losses.txt", "plain name"),
        ("losses.csv\0", "plain name"),
        (7, "plain name"),
        ("absent.csv", "there is no file absent.csv"),
    ],
)
def test_files_that_are_not_plainly_beside_the_book(folder, books, file, words):
    put(folder, "port.json", {**FILED, "file": file})
    assert words in reason(books, "port")


@pytest.mark.parametrize(
    ("document", "words"),
    [
        ("{", "not JSON"),
        ("[]", "JSON object"),
        ("\ufeff{}", "byte order mark"),
        ('{"kind": "nonsense"}', "kind"),
        ({"kind": "book", "name": "port"}, "holds its losses itself"),
        ({"kind": "scenarios", "part": "table"}, "by `file`"),
        ({**FILED, "values": [[1.0]]}, "exactly one"),
        ({"kind": "factors", "factors": [], "sub_portfolios": [], "file": "losses.csv"}, "scenarios or history"),
        ({"losses": FILED, "measures": [{"kind": "value_at_risk", "level": 99.5}]}, "0.995, not 99.5"),
        ({"losses": FILED, "mesures": []}, "mesures"),
        ({"losses": FILED, "group_by": ["line"]}, "attribute"),
        ({**FILED, "sub_portfolios": [{"id": "=1+1"}, {"id": "cargo"}]}, "begins with a letter"),
    ],
)
def test_damaged_books_say_why_and_others_work(folder, books, document, words):
    put(folder, "losses.csv", CSV)
    put(folder, "good.json", FILED)
    put(folder, "bad.json", document)
    assert words in reason(books, "bad")
    assert [(one.name, one.state) for one in books.described(WORK)] == [("bad", "damaged"), ("good", "ready")]


def test_a_table_with_an_error_names_its_place(folder, books):
    put(folder, "port.json", FILED)
    put(folder, "losses.csv", "hull,cargo\n1,2\n3,many\n")
    assert "row 2" in reason(books, "port")
    put(folder, "losses.csv", "=1+1,cargo\n1,2\n")
    assert "begins with a letter" in reason(books, "port")


def test_a_change_of_either_file_is_seen(folder, books):
    put(folder, "port.json", FILED)
    put(folder, "losses.csv", CSV)
    first = books.get("port", WORK)
    assert books.look("port") is None or books.look("port") is first
    (folder / "losses.csv").write_text(CSV.replace("5,6", "5,7"))
    assert books.look("port") is None
    second = books.get("port", WORK)
    assert second.source.digest != first.source.digest
    np.testing.assert_array_equal(first.source.table.losses, TABLE)  # what runs keeps what it began with
    put(folder, "port.json", {**FILED, "currency": "CHF"})
    assert books.get("port", WORK).labels.currency == "CHF"
    put(folder, "losses.csv", "hull\nx\n")
    reason(books, "port")
    put(folder, "losses.csv", CSV)
    assert books.get("port", WORK).source.digest == first.source.digest
    (folder / "port.json").unlink()
    with pytest.raises(NotFound):
        books.look("port")


def test_a_change_in_the_same_tick_and_of_the_same_size_is_seen(folder, books):
    put(folder, "port.json", FILED)
    table = folder / "losses.csv"
    table.write_text(CSV)
    status = table.stat()
    books.get("port", WORK)
    table.write_text(CSV.replace("5,6", "5,7"))
    os.utime(table, ns=(status.st_atime_ns, status.st_mtime_ns))
    assert books.get("port", WORK).source.table.losses[2, 1] == 7.0


def test_a_book_that_is_not_changed_is_read_once(folder, monkeypatch):
    books = Books(Settings(books=str(folder)))
    put(folder, "port.json", FILED)
    put(folder, "losses.csv", CSV)
    settle(folder, monkeypatch)
    read_ = []
    reader = Books._book
    monkeypatch.setattr(Books, "_book", lambda *a: read_.append(1) or reader(*a))
    threads = [Thread(target=books.get, args=("port", WORK)) for _ in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert books.look("port") is books.get("port", WORK)
    books.described(WORK)
    assert len(read_) == 1


def settle(folder, monkeypatch):
    """Let files count as settled at once."""
    monkeypatch.setattr("service.books.UNSETTLED", -1)


def test_tables_are_held_within_the_memory_allowed(folder, monkeypatch):
    settle(folder, monkeypatch)
    put(folder, "losses.csv", "a,b\n" + "1,2\n" * 500)
    for name in ("one", "two", "three"):
        put(folder, f"{name}.json", FILED)
    books = Books(Settings(books=str(folder), max_book_bytes=20_000))
    for name in ("one", "two", "one", "three"):
        books.get(name, WORK)
    assert [books.look(name) is not None for name in ("one", "two", "three")] == [True, False, True]
    assert books.description("two", WORK).scenarios == 500  # what is known of it needs no table
    assert books.look("two") is None
    assert books.get("two", WORK).source.table.scenarios == 500
    none = Books(Settings(books=str(folder), max_book_bytes=0))
    assert none.get("one", WORK).source.table.scenarios == 500
    assert none.look("one") is None


def test_files_that_change_while_they_are_read(folder, monkeypatch):
    books = Books(Settings(books=str(folder)))
    put(folder, "port.json", FILED)
    put(folder, "losses.csv", CSV)
    reader, times = Books._book, []

    def meddled(*arguments):
        book = reader(*arguments)
        if len(times) < 2:
            times.append(1)
            put(folder, "losses.csv", CSV + "9,9\n" * len(times))
        return book

    monkeypatch.setattr(Books, "_book", meddled)
    assert books.get("port", WORK).source.table.scenarios == 6


def test_no_folder_no_books_and_own_books_win():
    assert Books(Settings()).names() == []
    assert Books(Settings(books="/nowhere/at/all")).names() == []
    assert Books(Settings(demo=True)).names() == ["ternholm", "ternholm_model"]


def test_the_books_of_the_demonstration():
    books = Books(Settings(demo=True))
    assert [(one.name, one.state, one.kind) for one in books.described(WORK)] == [
        ("ternholm", "ready", "scenarios"),
        ("ternholm_model", "ready", "factors"),
    ]
    example = FOLDER / "insurer_model.request.json"
    assert (demo.FOLDER / "ternholm_model.json").read_bytes() == example.read_bytes()


def test_own_books_win_over_those_of_the_demonstration(folder):
    put(folder, "ternholm.json", {"kind": "scenarios", "sub_portfolios": [{"id": "own"}], "values": [[1.0]]})
    books = Books(Settings(books=str(folder), demo=True))
    assert books.description("ternholm", WORK).sub_portfolios[0].id == "own"


def test_a_request_without_a_server_may_name_a_book(folder, tmp_path, capsysbinary, monkeypatch):
    put(folder, "port.json", FILED)
    put(folder, "losses.csv", CSV)
    request = tmp_path / "request.json"
    measures = [{"kind": "value_at_risk", "level": 0.5}]
    request.write_text(json.dumps({"losses": {"kind": "book", "name": "port"}, "measures": measures}))
    monkeypatch.setenv("TAILRACE_BOOKS", "")
    command = ["compute", str(request), "--to", "measures", "--as", "json"]
    assert cli.main([*command, "--books", str(folder)]) == 0
    answer = json.loads(capsysbinary.readouterr().out)
    assert answer["provenance"]["losses_digest"] == books_digest(folder)
    monkeypatch.setenv("TAILRACE_BOOKS", "")
    assert cli.main(command) == 2
    assert b"there is no book 'port' here" in capsysbinary.readouterr().err


def books_digest(folder):
    return Books(Settings(books=str(folder))).get("port", WORK).source.digest
