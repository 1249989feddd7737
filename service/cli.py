"""The terminal's door. Heavy parts are imported by the command that needs them: help comes at once."""

import argparse
import os
import signal
import socket
import sys
from collections.abc import Callable, Sequence
from contextlib import suppress
from dataclasses import MISSING, fields
from pathlib import Path
from typing import TYPE_CHECKING

from service import __version__
from service.settings import Settings, variable

if TYPE_CHECKING:
    from service.intake import Intake

BAD_USAGE = 2  # exit code, as argparse's own
FAILED = 1
INTERRUPTED = 130  # as shells say it of SIGINT
KEEP_ALIVE_SECONDS = 65  # above the 60 of common proxies: they, not we, close idle connections
PORTS = 65535


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command that `arguments` name (those of the process if None) and return its exit code."""
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # NumPy reads it when it is imported: the threads are ours
    options = _parser().parse_args(arguments)
    try:
        code: int = options.run(options)
        sys.stdout.flush()
    except BrokenPipeError:  # whoever reads has seen enough
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return FAILED
    except KeyboardInterrupt:
        return INTERRUPTED
    return code


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="tailrace",
        description="Loss scenarios in, risk measures and capital allocations out.",
    )
    parser.add_argument("--version", action="version", version=f"tailrace {__version__}")
    commands = parser.add_subparsers(title="commands", required=True, metavar="COMMAND")
    _add_demo(commands)
    _add_serve(commands)
    _add_compute(commands)
    return parser


def _add_demo(commands: "argparse._SubParsersAction[argparse.ArgumentParser]") -> None:
    demo = commands.add_parser(
        "demo",
        help="allocate the capital of an invented insurer",
        description="Compute the allocation of Ternholm Mutual, an invented insurer, from scenarios and from a factor "
        "model, and print both.",
    )
    demo.set_defaults(run=_demo)


def _add_compute(commands: "argparse._SubParsersAction[argparse.ArgumentParser]") -> None:
    compute = commands.add_parser(
        "compute",
        help="answer a request without a server",
        description="Answer the request body in a file, as the service would.",
    )
    compute.add_argument("request", metavar="REQUEST.json", help="file with the request; - reads standard input")
    compute.add_argument(
        "--to",
        choices=("measures", "allocations", "increments", "comparisons"),
        default="allocations",
        help="calculation (default allocations)",
    )
    compute.add_argument(
        "--as",
        dest="form",
        choices=("table", "json", "csv", "xml", "arrow", "svg", "png"),
        default="table",
        help="form of the answer (default table)",
    )
    compute.add_argument("--books", metavar="DIR", help=f"folder of the books it names ({variable('books')})")
    compute.set_defaults(run=_compute)


def _demo(_options: argparse.Namespace) -> int:
    """Print the allocations of the demonstration, from its scenarios and from a factor model, and how to go on."""
    from service import demo, intake
    from service.payloads import CSV

    def read(settings: Settings) -> "intake.Intake":
        return intake.read_parts("allocations", demo.request(), demo.table(), CSV, settings)

    def read_model(settings: Settings) -> "intake.Intake":
        return intake.read("allocations", demo.model(), content_type=intake.JSON, parameters=(), settings=settings)

    code = _answered(read, "table")
    if code == 0:
        print(demo.BETWEEN)
        code = _answered(read_model, "table")
    if code == 0:
        print(demo.NEXT_STEPS, end="")
    return code


def _compute(options: argparse.Namespace) -> int:
    """Print the answer to a request in a file."""
    from service import intake
    from service.errors import CallerError, InvalidValue
    from service.terminal import mistaken

    try:
        body = sys.stdin.buffer.read() if options.request == "-" else Path(options.request).read_bytes()
    except OSError as error:
        return _complain(f"cannot read {options.request}: {error.strerror}", FAILED)

    def read(settings: Settings) -> intake.Intake:
        try:
            return intake.read(options.to, body, content_type=intake.JSON, parameters=(), settings=settings)
        except CallerError as error:
            words = mistaken(options.request, body, options.to)
            raise (InvalidValue(words) if words else error) from None

    if options.books is not None:
        os.environ[variable("books")] = options.books
    return _answered(read, options.form, options.to)


def _answered(read: "Callable[[Settings], Intake]", form: str, calculation: str = "allocations") -> int:
    """Compute in this process and print the answer; return the exit code."""
    from service import calculate, problems
    from service.books import Books
    from service.errors import TailraceError
    from service.executors import Work
    from service.representations import formats
    from service.routes.forms import picture
    from service.terminal import ProgressBar, complaint, readable

    try:
        settings = _checked(Settings.from_environment(os.environ))
    except ValueError as error:
        return _complain(str(error), BAD_USAGE)
    chosen = next((known for known in formats.FORMS[calculation] if known.suffix == form), None)
    if chosen is None and form != "table":
        there = ", ".join(known.suffix for known in formats.FORMS[calculation])
        return _complain(f"{calculation} have no form {form}: there are table, {there}", BAD_USAGE)
    bar = ProgressBar()
    try:
        work = Work(settings.threads, bar)
        written: str | bytes
        taken = Books(settings).resolved(read(settings), work)
        if chosen is not None and chosen.drawn:
            written = formats.write(picture(calculate.drawing(taken, work, settings), None), chosen)
        else:
            answer = calculate.answer(taken, work, settings, problems.describe)
            written = readable(answer) if chosen is None else formats.write(answer, chosen)
    except TailraceError as error:
        bar.end()
        return _complain(complaint(error), BAD_USAGE)
    bar.end()
    if isinstance(written, str):
        print(written, end="")
    else:
        sys.stdout.buffer.write(written)
    return 0


def _checked(settings: Settings) -> Settings:
    """Return settings whose folder of books is there.

    Raises
    ------
    ValueError
        There is no such folder.
    """
    if settings.books and not Path(settings.books).is_dir():
        raise ValueError(f"there is no folder {settings.books!r} of books ({variable('books')})")
    return settings


def _add_serve(commands: "argparse._SubParsersAction[argparse.ArgumentParser]") -> None:
    """Add `tailrace serve` with an option for every setting."""
    serve = commands.add_parser(
        "serve",
        help="start the service",
        description="Start the service. Every option is also an environment variable, named behind its "
        "meaning; the option wins.",
    )
    serve.set_defaults(run=_serve)
    for name, default, meaning in (
        ("host", "127.0.0.1", "address to listen on"),
        ("port", "8000", "port to listen on; 0 takes a free one"),
        ("workers", "1", "processes that answer"),
    ):
        _add_option(serve, name, default, meaning)
    for spec in fields(Settings):
        meaning, unit = spec.metadata["meaning"], spec.metadata["unit"]
        if spec.type is bool:
            serve.add_argument(
                "--" + spec.name, action="store_const", const="true", help=f"{meaning} ({variable(spec.name)})"
            )
        elif spec.type is str:
            _add_option(serve, spec.name, "none", meaning)
        else:
            default = "" if spec.default is MISSING else f"{spec.default}"
            _add_option(serve, spec.name, default, f"{meaning}, in {unit}")


def _add_option(parser: argparse.ArgumentParser, name: str, default: str, meaning: str) -> None:
    parser.add_argument(
        "--" + name.replace("_", "-"),
        dest=name,
        metavar=name.rpartition("_")[2].upper(),
        help=f"{meaning} (default {default}; {variable(name)})",
    )


def _serve(options: argparse.Namespace) -> int:
    """Serve until told to stop."""
    given = {variable(name): text for name, text in vars(options).items() if name != "run" and text is not None}
    environment = {**os.environ, **given}
    try:
        settings = _checked(Settings.from_environment(environment))
        port = _whole(environment, "port", "8000", least=0, most=PORTS)
        workers = _whole(environment, "workers", "1", least=1, most=PORTS)
    except ValueError as error:
        return _complain(str(error), BAD_USAGE)
    host = environment.get(variable("host"), "127.0.0.1")
    try:
        host, port = _free(host, port)
    except OSError as error:
        return _complain(f"cannot listen on {host} port {port}: {error.strerror or error}", FAILED)
    os.environ.update(given)  # for the processes that the server starts
    shown = f"[{host}]" if ":" in host else host
    print(f"tailrace {__version__} serves on http://{shown}:{port}", file=sys.stderr, flush=True)
    _run(host, port, workers=workers, stop_seconds=settings.stop_seconds)
    return 0


def _free(host: str, port: int) -> tuple[str, int]:
    """Return the address that can be listened on; port 0 becomes one that is free.

    Raises
    ------
    OSError
        The port is in use, or the host is none of this machine.
    """
    family, kind, protocol, _, address = socket.getaddrinfo(host, port, type=socket.SOCK_STREAM)[0]
    with socket.socket(family, kind, protocol) as trial:
        if os.name == "posix":
            trial.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        trial.bind(address)
        found = trial.getsockname()
    return found[0], found[1]


def _run(host: str, port: int, *, workers: int, stop_seconds: int) -> None:
    """Answer until a signal comes; requests that run then may finish."""
    import uvicorn
    from uvicorn.supervisors import Multiprocess

    from service.logs import CONFIGURATION

    signal.signal(signal.SIGTERM, lambda *_: sys.exit(0))  # the server hands the signal on once it has stopped
    config = uvicorn.Config(
        "service.app:from_environment",
        factory=True,
        host=host,
        port=port,
        workers=workers,
        log_config=CONFIGURATION,
        access_log=False,
        server_header=False,
        timeout_keep_alive=KEEP_ALIVE_SECONDS,
        timeout_graceful_shutdown=stop_seconds,
    )
    if workers > 1:
        shared = config.bind_socket()
        shared.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)  # else each answer waits 40 ms for a client's ACK
        Multiprocess(config, sockets=[shared]).run()
        return
    server = uvicorn.Server(config)
    with suppress(KeyboardInterrupt):
        server.run()
    if not server.started:
        sys.exit(FAILED)


def _whole(environment: dict[str, str], name: str, default: str, *, least: int, most: int) -> int:
    """Return the whole number that a variable of the server holds."""
    text = environment.get(variable(name), default)
    if not text.isascii() or not text.isdigit() or not least <= int(text) <= most:
        raise ValueError(f"{variable(name)} is {text!r}, not a whole number from {least} to {most}")
    return int(text)


def _complain(sentence: str, code: int) -> int:
    print(f"tailrace: {sentence}", file=sys.stderr)
    return code
