"""Answers kept: the last ones that fit, one computation at a time, and none for those who have gone."""

import asyncio

import pytest

from service.errors import Cancelled, InvalidValue
from service.kept import Kept, Store


def run(story):
    return asyncio.run(asyncio.wait_for(story, 20))


def kept(most=100):
    return Kept(most, len)


async def at_once(value):
    await asyncio.sleep(0)
    return value


def test_the_answers_used_last_are_kept():
    async def story():
        answers, gone = kept(most=10), asyncio.Event()
        for key in ("a", "b"):
            await answers.shared(key, lambda _gone: at_once("four"), gone)
        assert answers.get("a") == "four"
        await answers.shared("c", lambda _gone: at_once("four"), gone)
        assert [answers.get(key) for key in "abc"] == ["four", None, "four"]
        await answers.shared("d", lambda _gone: at_once("too long for it"), gone)
        assert answers.get("d") is None
        assert answers.get("c") == "four"
        assert kept(most=0).get("a") is None

    run(story())


def test_all_who_ask_at_the_same_time_get_one_computation():
    async def story():
        answers, made, begun = kept(), [], asyncio.Event()

        async def compute(_gone):
            made.append(1)
            begun.set()
            await asyncio.sleep(0.05)
            return "answer"

        asked = [asyncio.create_task(answers.shared("key", compute, asyncio.Event())) for _ in range(20)]
        assert await asyncio.gather(*asked) == ["answer"] * 20
        assert await answers.shared("key", compute, asyncio.Event()) == "answer"
        assert made == [1]

    run(story())


def test_errors_reach_all_and_are_not_kept():
    async def story():
        answers, made = kept(), []

        async def compute(_gone):
            made.append(1)
            await asyncio.sleep(0.01)
            raise InvalidValue("no")

        asked = [asyncio.create_task(answers.shared("key", compute, asyncio.Event())) for _ in range(3)]
        results = await asyncio.gather(*asked, return_exceptions=True)
        assert [type(one) for one in results] == [InvalidValue] * 3
        with pytest.raises(InvalidValue):
            await answers.shared("key", compute, asyncio.Event())
        assert made == [1, 1]

    run(story())


def test_a_computation_goes_on_while_one_caller_is_there_and_stops_after_the_last():
    async def story():
        answers, stopped = kept(), []

        async def compute(gone):
            try:
                await asyncio.wait_for(gone.wait(), 0.2)
                stopped.append(1)
                raise Cancelled("nobody waits")
            except TimeoutError:
                return "answer"

        first, second = asyncio.Event(), asyncio.Event()
        asked = [asyncio.create_task(answers.shared("key", compute, one)) for one in (first, second)]
        await asyncio.sleep(0.02)
        first.set()
        with pytest.raises(Cancelled):
            await asked[0]
        assert await asked[1] == "answer"
        assert stopped == []
        gone = asyncio.Event()
        alone = asyncio.create_task(answers.shared("other", compute, gone))
        await asyncio.sleep(0.02)
        gone.set()
        with pytest.raises(Cancelled):
            await alone
        await asyncio.sleep(0.02)
        assert stopped == [1]
        assert await answers.shared("other", lambda _gone: at_once("fresh"), asyncio.Event()) == "fresh"

    run(story())


def test_a_store_holds_what_was_used_last():
    store = Store(10)
    store.put("a", "first", 4)
    store.put("b", "second", 4)
    store.put("a", "again", 6)
    assert (store.get("a"), store.get("b")) == ("again", "second")
    store.put("c", "third", 1)
    assert (store.get("a"), store.get("b"), store.get("c")) == (None, "second", "third")
    store.put("b", "too large now", 11)
    assert store.get("b") is None
