"""Heavy work: it never holds the server up, tells how far it is, and stops at once."""

import asyncio
import time
from concurrent.futures import ThreadPoolExecutor

import pytest
from sumwright.errors import InvalidQuantity
from sumwright.jobs import Jobs


def count(to, each=0.0):
    """Yield 0 to `to - 1`, return their sum."""
    total = 0
    for k in range(to):
        time.sleep(each)
        total += k
        yield k
    return total


def refuse():
    """Refuse at once."""
    raise InvalidQuantity("The job is refused.")
    yield


def loud():
    """Print, as a library might, and return."""
    print("something")
    yield 1
    return "quiet"


def forever():
    """Never yield again: a long call into a library."""
    yield "begun"
    while True:
        time.sleep(0.05)


class Heard:
    def __init__(self):
        self.progress, self.done, self.failed, self.event = [], [], [], asyncio.Event()

    def callbacks(self):
        def done(value):
            self.done.append(value)
            self.event.set()

        def failed(text):
            self.failed.append(text)
            self.event.set()

        return {"progress": self.progress.append, "done": done, "failed": failed}


def run(test):
    async def limited():
        jobs = Jobs()
        try:
            await asyncio.wait_for(test(jobs), 60)
        finally:
            jobs.close()
            await asyncio.sleep(0.05)

    # in a thread of its own: the browser's tests leave an event loop running in this one
    with ThreadPoolExecutor(1) as pool:
        pool.submit(asyncio.run, limited()).result()


def test_progress_comes_in_order_and_then_the_result():
    async def test(jobs):
        heard = Heard()
        jobs.start("sum", count, 5, **heard.callbacks())
        assert jobs.running("sum")
        await heard.event.wait()
        assert heard.progress == [0, 1, 2, 3, 4]
        assert heard.done == [10]
        assert not jobs.running("sum")

    run(test)


def test_a_refusal_arrives_as_its_sentence():
    async def test(jobs):
        heard = Heard()
        jobs.start("no", refuse, **heard.callbacks())
        await heard.event.wait()
        assert heard.failed == ["The job is refused."]
        assert heard.done == []

    run(test)


def test_what_a_job_prints_does_not_spoil_its_result():
    async def test(jobs):
        heard = Heard()
        jobs.start("loud", loud, **heard.callbacks())
        await heard.event.wait()
        assert heard.done == ["quiet"]

    run(test)


def test_the_newest_job_under_a_key_wins():
    async def test(jobs):
        old, new = Heard(), Heard()
        jobs.start("sum", count, 1000, 0.01, **old.callbacks())
        await asyncio.sleep(0.3)
        jobs.start("sum", count, 3, **new.callbacks())
        await new.event.wait()
        told = len(old.progress)
        await asyncio.sleep(0.2)
        assert new.done == [3]
        assert old.done == old.failed == []
        assert len(old.progress) == told

    run(test)


def test_a_job_in_the_middle_of_a_long_call_stops_at_once_and_the_next_one_runs():
    async def test(jobs):
        heard, after = Heard(), Heard()
        jobs.start("long", forever, **heard.callbacks())
        while not heard.progress:
            await asyncio.sleep(0.01)
        jobs.stop("long")
        assert not jobs.running("long")
        jobs.start("next", count, 2, **after.callbacks())
        await after.event.wait()
        assert after.done == [1]
        assert heard.done == heard.failed == []

    run(test)


def test_the_server_goes_on_while_a_job_works():
    async def test(jobs):
        heard = Heard()
        jobs.start("long", forever, **heard.callbacks())
        while not heard.progress:
            await asyncio.sleep(0.01)
        turns = 0
        end = asyncio.get_running_loop().time() + 0.3
        while asyncio.get_running_loop().time() < end:
            await asyncio.sleep(0)
            turns += 1
        assert turns > 100

    run(test)


def test_a_job_that_dies_says_so():
    async def test(jobs):
        heard = Heard()
        jobs.start("dead", die, **heard.callbacks())
        await heard.event.wait()
        assert "unexpectedly" in heard.failed[0]

    run(test)


@pytest.mark.parametrize("which", ["done", "progress"])
def test_a_result_that_cannot_be_taken_up_ends_in_a_sentence(which):
    async def test(jobs):
        heard = Heard()

        def broken(value):
            raise RuntimeError("no document")

        jobs.start("sum", count, 3, **{**heard.callbacks(), which: broken})
        await heard.event.wait()
        assert heard.failed and "try again" in heard.failed[0]
        assert not jobs.running("sum")

    run(test)


def die():
    """End the process, as a fault in a library would."""
    import os

    yield 1
    os._exit(3)


@pytest.mark.parametrize("key", ["never started"])
def test_stopping_what_does_not_run_does_nothing(key):
    Jobs().stop(key)
