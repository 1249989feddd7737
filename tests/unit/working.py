"""Ways to let a calculation work that differ in everything but the result."""

from dataclasses import dataclass

import numpy as np

from service.executors import Work, keep_going


@dataclass(frozen=True)
class Shuffled(Work):
    """Pieces are worked on in an order of its own, results come in theirs."""

    threads: int = 3
    checkpoint: object = keep_going
    seed: int | None = None
    """None: last first."""

    def part(self, start, stop):
        return self

    def map(self, function, pieces):
        pieces = list(pieces)
        order = np.arange(len(pieces))[::-1]
        if self.seed is not None:
            order = np.random.default_rng(self.seed).permutation(len(pieces))
        results = {place: function(pieces[place]) for place in order.tolist()}
        return [results[place] for place in range(len(pieces))]


ORDERS = {
    "two threads": Work(2),
    "three threads": Work(3),
    "last first": Shuffled(),
    "shuffled": Shuffled(seed=5),
}
