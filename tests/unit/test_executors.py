"""An ordered map on threads that asks whether the work is still wanted."""

from threading import Barrier, get_ident

import pytest

from service.errors import Cancelled
from service.executors import Work


@pytest.mark.parametrize("threads", [1, 2, 5])
@pytest.mark.parametrize("pieces", [0, 1, 2, 3, 50])
def test_results_come_in_the_order_of_the_pieces(threads, pieces):
    assert Work(threads).map(lambda piece: piece * piece, iter(range(pieces))) == [n * n for n in range(pieces)]


def test_pieces_are_worked_on_at_the_same_time():
    meeting = Barrier(3)
    seen = Work(3).map(lambda _: (meeting.wait(10), get_ident())[1], range(3))
    assert len(set(seen)) == 3
    assert get_ident() not in seen


def test_one_thread_is_the_caller_s_own():
    assert set(Work(1).map(lambda _: get_ident(), range(4))) == {get_ident()}


@pytest.mark.parametrize("threads", [1, 3])
def test_the_map_stops_when_the_work_is_not_wanted(threads):
    done = []

    def checkpoint(_fraction=0.0):
        if len(done) >= 5:
            raise Cancelled("enough")

    with pytest.raises(Cancelled):
        Work(threads, checkpoint).map(done.append, range(10_000))
    assert 5 <= len(done) < 50


@pytest.mark.parametrize("threads", [1, 3])
def test_a_failing_piece_fails_the_map(threads):
    with pytest.raises(ZeroDivisionError):
        Work(threads).map(lambda piece: 1 // (piece - 7), range(100))
