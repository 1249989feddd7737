"""Settings from the environment: numbers, texts and switches."""

import pytest

from service.settings import Settings


def test_texts_and_switches():
    made = Settings.from_environment(
        {"TAILRACE_BOOKS": "/some/folder", "TAILRACE_DEMO": "true", "TAILRACE_CORS_ORIGINS": "https://a.example"}
    )
    assert (made.books, made.demo, made.cors_origins) == ("/some/folder", True, "https://a.example")
    assert (Settings().books, Settings().demo, Settings().cors_origins) == ("", False, "")
    assert Settings.from_environment({"TAILRACE_DEMO": "0"}).demo is False


def test_numbers_and_what_is_refused():
    assert Settings.from_environment({"TAILRACE_MAX_BOOK_BYTES": "5"}).max_book_bytes == 5
    for name, text, words in (
        ("TAILRACE_DEMO", "perhaps", "not true or false"),
        ("TAILRACE_MAX_BOOK_BYTES", "many", "not a number of bytes"),
        ("TAILRACE_MAX_ANSWER_BYTES", "-1", "at least 0"),
        ("TAILRACE_BOOK", "x", "unknown setting"),
    ):
        with pytest.raises(ValueError, match=words):
            Settings.from_environment({name: text})
