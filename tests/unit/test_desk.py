"""Who computes, who waits, who is sent away, and when work ends."""

import asyncio
from threading import Event, get_ident
from time import sleep

import pytest

from service.desk import Desk
from service.errors import Busy, Cancelled, TooLong
from service.settings import Settings


def on_a_desk(scenario, **settings):
    async def run():
        desk = Desk(Settings(**settings))
        try:
            return await asyncio.wait_for(scenario(desk), 20)
        finally:
            desk.close()

    return asyncio.run(run())


async def soon(condition):
    while not condition():  # noqa: ASYNC110  # what is waited for is a count, not an event
        await asyncio.sleep(0.002)


def start(desk, job, gone=None, **options):
    return asyncio.create_task(desk.run(job, seconds=None, gone=gone or asyncio.Event(), **options))


def test_a_job_runs_in_a_thread_and_a_short_one_at_once():
    async def scenario(desk):
        threads = [await start(desk, lambda _work: get_ident(), short=short) for short in (False, True)]
        assert threads[0] != get_ident()
        assert threads[1] == get_ident()
        assert desk.computing == desk.waiting == 0

    on_a_desk(scenario)


def test_work_says_how_many_threads():
    async def scenario(desk):
        assert await start(desk, lambda work: work.threads) == 3

    on_a_desk(scenario, threads=3)


def test_first_come_first_served_within_the_places():
    order, together, most = [], 0, 0

    async def scenario(desk):
        nonlocal most
        release = Event()

        def job(number):
            def run(_work):
                nonlocal together, most
                together += 1
                most = max(most, together)
                order.append(number)
                release.wait(10)
                together -= 1

            return run

        tasks = [start(desk, job(0)), start(desk, job(1))]
        await soon(lambda: desk.computing == 2)
        for number in range(2, 6):
            tasks.append(start(desk, job(number)))
            await soon(lambda number=number: desk.waiting == number - 1)
        release.set()
        await asyncio.gather(*tasks)
        assert desk.computing == desk.waiting == 0

    on_a_desk(scenario, max_concurrent=2, max_waiting=10)
    assert most == 2
    assert sorted(order[:2]) == [0, 1]
    assert sorted(order) == list(range(6))


def test_busy_tells_when_to_come_again():
    async def scenario(desk):
        release = Event()
        desk._typical = 3.5
        first = start(desk, lambda _work: release.wait(10))
        await soon(lambda: desk.computing == 1)
        desk.check()
        second = start(desk, lambda _work: None)
        await soon(lambda: desk.waiting == 1)
        with pytest.raises(Busy) as caught:
            await start(desk, lambda _work: None)
        assert caught.value.retry_after == 7  # two jobs of 3.5 s are ahead
        assert not desk.has_place
        release.set()
        await asyncio.gather(first, second)
        desk.check()

    on_a_desk(scenario, max_concurrent=1, max_waiting=1)


def test_nobody_waits_where_there_is_no_room_for_it():
    async def scenario(desk):
        release = Event()
        first = start(desk, lambda _work: release.wait(10))
        await soon(lambda: desk.computing == 1)
        with pytest.raises(Busy):
            await start(desk, lambda _work: None)
        release.set()
        await first

    on_a_desk(scenario, max_concurrent=1, max_waiting=0)


def endless(work):
    while True:
        work.checkpoint()
        sleep(0.001)


@pytest.mark.parametrize(("asked", "allowed"), [(None, 0.05), (10.0, 0.05), (0.01, 0.01)])
def test_the_shorter_time_counts(asked, allowed):
    async def scenario(desk):
        with pytest.raises(TooLong) as caught:
            await desk.run(endless, seconds=asked, gone=asyncio.Event())
        assert caught.value.limit.allowed == allowed
        assert caught.value.limit.setting == "TAILRACE_MAX_SECONDS"
        assert desk.computing == 0

    on_a_desk(scenario, max_seconds=0.05)


def test_waiting_does_not_use_up_the_time_to_compute():
    async def scenario(desk):
        release = Event()
        first = start(desk, lambda _work: release.wait(10))
        await soon(lambda: desk.computing == 1)
        second = start(desk, lambda work: work.checkpoint() or "done")
        await asyncio.sleep(0.2)
        release.set()
        assert await second == "done"
        await first

    on_a_desk(scenario, max_concurrent=1, max_seconds=0.1)


def test_work_stops_when_the_caller_has_gone():
    async def scenario(desk):
        gone = asyncio.Event()
        task = start(desk, endless, gone)
        await soon(lambda: desk.computing == 1)
        gone.set()
        with pytest.raises(Cancelled):
            await task
        assert desk.computing == 0

    on_a_desk(scenario)


def test_waiting_stops_when_the_caller_has_gone():
    async def scenario(desk):
        release, gone = Event(), asyncio.Event()
        first = start(desk, lambda _work: release.wait(10))
        await soon(lambda: desk.computing == 1)
        second, third = start(desk, lambda _work: 2, gone), start(desk, lambda _work: 3)
        await soon(lambda: desk.waiting == 2)
        gone.set()
        with pytest.raises(Cancelled):
            await second
        assert desk.waiting == 1
        release.set()
        await first
        assert await third == 3
        assert desk.computing == 0

    on_a_desk(scenario, max_concurrent=1)


def test_a_place_given_to_one_who_left_goes_to_the_next():
    async def scenario(desk):
        release, gone = Event(), asyncio.Event()
        first = start(desk, lambda _work: release.wait(10))
        await soon(lambda: desk.computing == 1)
        second, third = start(desk, lambda _work: 2, gone), start(desk, lambda _work: 3)
        await soon(lambda: desk.waiting == 2)
        gone.set()
        desk._leave()  # in the same turn of the loop: the second gets the place and has gone
        desk.computing += 1
        with pytest.raises(Cancelled):
            await second
        release.set()
        assert await third == 3
        await first

    on_a_desk(scenario, max_concurrent=1)


@pytest.mark.parametrize("waiting", [False, True])
def test_a_cancelled_request_leaves_nothing_behind(waiting):
    async def scenario(desk):
        stopped, release = Event(), Event()

        def job(work):
            try:
                endless(work)
            finally:
                stopped.set()

        first = start(desk, lambda _work: release.wait(10)) if waiting else None
        if waiting:
            await soon(lambda: desk.computing == 1)
        task = start(desk, job)
        await soon(lambda: desk.waiting == 1 if waiting else desk.computing == 1)
        await asyncio.sleep(0.01)
        task.cancel()
        with pytest.raises(asyncio.CancelledError):
            await task
        if waiting:
            release.set()
            await first
        else:
            assert await asyncio.to_thread(stopped.wait, 10)
        assert desk.computing == desk.waiting == 0

    on_a_desk(scenario, max_concurrent=1)


def test_a_failing_job_gives_its_place_back():
    async def scenario(desk):
        for short in (True, False):
            with pytest.raises(ZeroDivisionError):
                await start(desk, lambda _work: 1 // 0, short=short)
        assert desk.computing == 0

    on_a_desk(scenario)


def test_a_closed_desk_takes_nothing():
    async def scenario(desk):
        desk.close()
        with pytest.raises(Busy, match="stopping"):
            await start(desk, lambda _work: None)

    on_a_desk(scenario)
