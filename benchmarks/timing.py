"""Times of several pieces of work that take turns, so that whatever disturbs the machine hits all alike."""

from collections.abc import Callable, Mapping
from time import perf_counter, process_time


def taking_turns(
    works: Mapping[str, Callable[[], object]], repeats: int, *, warm: bool = True
) -> dict[str, list[float]]:
    """Return the seconds of each work, repeat by repeat.

    Parameters
    ----------
    works : mapping of str to callable
    repeats : int
        How often each of them is timed; the order of the works is the same in every repeat.
    warm : bool
        Whether each runs once before, untimed.
    """
    for work in works.values() if warm else ():
        work()
    seconds: dict[str, list[float]] = {name: [] for name in works}
    for _ in range(repeats):
        for name, work in works.items():
            began = perf_counter()
            work()
            seconds[name].append(perf_counter() - began)
    return seconds


def ratios(above: list[float], below: list[float]) -> list[float]:
    """Return one ratio per repeat; what slows down a whole repeat leaves it as it is."""
    return [over / under for over, under in zip(above, below, strict=True)]


def one_by_one(
    above: Callable[[], object], below: Callable[[], object], repeats: int, *, warm: bool = True
) -> list[float]:
    """Return the times of one work over those of another, repeat by repeat."""
    seconds = taking_turns({"above": above, "below": below}, repeats, warm=warm)
    return ratios(seconds["above"], seconds["below"])


def processor_seconds(works: Mapping[str, Callable[[], object]], repeats: int) -> dict[str, float]:
    """Return the least processor time of each work over all threads: what other jobs disturb least."""
    seconds: dict[str, list[float]] = {name: [] for name in works}
    for _ in range(repeats):
        for name, work in works.items():
            began = process_time()
            work()
            seconds[name].append(process_time() - began)
    return {name: min(found) for name, found in seconds.items()}
