"""The settings of one server: each has a safe default and an environment variable ``TAILRACE_…``."""

from collections.abc import Mapping
from dataclasses import Field, dataclass, field, fields
from os import cpu_count
from typing import Any

PREFIX = "TAILRACE_"
MEBIBYTE = 1 << 20
SWITCH = {"true": True, "1": True, "false": False, "0": False, "": False}
LISTENING = ("host", "port", "workers")
"""Where and as what the server runs: variables of `tailrace serve` alone, no settings of the app."""


def _setting(default: float, meaning: str, *, unit: str, least: float = 1) -> Any:
    """Return a dataclass field that carries what `GET /v1/limits` and the documentation say of it."""
    return field(default=default, metadata={"meaning": meaning, "unit": unit, "least": least})


def _words(meaning: str) -> Any:
    """Return a dataclass field that holds a text, by default none."""
    return field(default="", metadata={"meaning": meaning, "unit": "text"})


def _switch(meaning: str) -> Any:
    """Return a dataclass field that is off by default."""
    return field(default=False, metadata={"meaning": meaning, "unit": "true or false"})


@dataclass(frozen=True, slots=True, kw_only=True)
class Settings:
    """What an operator may set; made once at the door and passed in."""

    max_body_bytes: int = _setting(256 * MEBIBYTE, "size of one request body", unit="bytes", least=1024)
    max_envelope_bytes: int = _setting(
        32 * MEBIBYTE, "size of a JSON request without its table", unit="bytes", least=1024
    )
    max_cells: int = _setting(50_000_000, "scenarios times sub-portfolios of one loss table", unit="cells")
    max_scenarios: int = _setting(100_000_000, "simulated scenarios of one request", unit="scenarios")
    max_memory_bytes: int = _setting(
        2048 * MEBIBYTE, "memory that the simulated losses of one request may take", unit="bytes", least=MEBIBYTE
    )
    max_sub_portfolios: int = _setting(10_000, "sub-portfolios of one request", unit="sub-portfolios")
    max_groups: int = _setting(1_000, "groups of one request", unit="groups")
    max_seconds: float = _setting(60.0, "computing time of one request", unit="seconds", least=0.001)
    max_concurrent: int = _setting(cpu_count() or 1, "requests that one process computes at once", unit="requests")
    max_book_bytes: int = _setting(
        1024 * MEBIBYTE, "memory that the tables of books may take between requests", unit="bytes", least=0
    )
    max_base_bytes: int = _setting(
        512 * MEBIBYTE,
        "memory that books made ready for candidates may take between requests",
        unit="bytes",
        least=0,
    )
    max_answer_bytes: int = _setting(
        64 * MEBIBYTE, "memory that answers kept for repeated GET requests may take", unit="bytes", least=0
    )
    max_waiting: int = _setting(64, "requests that wait for a place in one process", unit="requests", least=0)
    threads: int = _setting(cpu_count() or 1, "computing threads of one request", unit="threads")
    stop_seconds: int = _setting(25, "time to finish running requests when told to stop", unit="seconds")
    books: str = _words("folder of the books that the server may read; none without it")
    demo: bool = _switch("whether the invented books of the demonstration are served too")
    cors_origins: str = _words("origins, parted by commas, whose pages may call this server; none without it")

    @classmethod
    def from_environment(cls, environment: Mapping[str, str]) -> "Settings":
        """Read every setting from ``TAILRACE_<NAME>``.

        Parameters
        ----------
        environment : mapping of str to str
            Usually ``os.environ``; variables without the prefix are ignored.

        Raises
        ------
        ValueError
            For an unknown ``TAILRACE_`` variable or a value that is not allowed.
        """
        known = {variable(spec.name): spec for spec in fields(cls)}
        apart = {variable(name) for name in LISTENING}
        given = {name: text for name, text in environment.items() if name.startswith(PREFIX) and name not in apart}
        unknown = sorted(given.keys() - known.keys())
        if unknown:
            msg = f"unknown setting {unknown[0]}; the settings are {', '.join(known)}"
            raise ValueError(msg)
        values: dict[str, Any] = {known[name].name: _read(name, text, known[name]) for name, text in given.items()}
        return cls(**values)


def _read(name: str, text: str, spec: Field[Any]) -> float | str | bool:
    """Return the value of a setting from the text of its variable."""
    if spec.type is str:
        return text
    if spec.type is bool:
        if text not in SWITCH:
            raise ValueError(f"{name} is {text!r}, not true or false")
        return SWITCH[text]
    kind = float if spec.type is float else int
    try:
        value = kind(text)
    except ValueError:
        raise ValueError(f"{name} is {text!r}, not a number of {spec.metadata['unit']}") from None
    if not spec.metadata["least"] <= value < float("inf"):
        raise ValueError(f"{name} is {text}, but at least {spec.metadata['least']:g} is needed")
    return value


def variable(name: str) -> str:
    """Return the environment variable that sets the setting `name`."""
    return PREFIX + name.upper()
