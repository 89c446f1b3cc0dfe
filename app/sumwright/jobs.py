"""Heavy work beside the server: in a process of its own, with progress, stoppable, newest first.

A job is a generator function: what it yields is progress, what it returns is the
result. It runs in another process, so one person's search never holds up another
person's slider, and stopping it ends that process at once, wherever it is. The
function must be at the top of a module and its arguments and results picklable.
"""

from __future__ import annotations

import asyncio
import contextlib
import importlib
import logging
import os
import pickle
import struct
import sys
from collections.abc import Callable, Iterator
from typing import Any

from sumwright.errors import SumwrightError

log = logging.getLogger(__name__)

WORKERS_MOST = max(1, (os.cpu_count() or 2) - 1)  # over all sessions; one core is for the hands
_LENGTH = struct.Struct(">Q")
_gate: dict[int, asyncio.Semaphore] = {}  # by event loop
_idle: dict[int, list[asyncio.subprocess.Process]] = {}


class Jobs:
    """One session's jobs, at most one under each key."""

    def __init__(self) -> None:
        self._tasks: dict[str, asyncio.Task] = {}

    def start(
        self,
        key: str,
        function: Callable[..., Iterator[Any]],
        *args: Any,
        progress: Callable[[Any], None] | None = None,
        done: Callable[[Any], None] | None = None,
        failed: Callable[[str], None] | None = None,
    ) -> None:
        """Run `function(*args)`; one under the same `key` still running is stopped first.

        `progress` gets each value yielded, `done` the value returned, `failed` one
        sentence; all are called in the server's thread, none after `stop`. They run outside
        the session's lock: what belongs to a document (a figure) is changed in the frame
        that they ask for, not in them. One that fails ends the job with `failed`.
        """
        self.stop(key)
        name = (function.__module__, function.__qualname__)
        self._tasks[key] = asyncio.ensure_future(self._run(key, name, args, progress, done, failed))

    def running(self, key: str) -> bool:
        """Is there a job under that key?"""
        return key in self._tasks

    def stop(self, key: str) -> None:
        """End the job under that key, if there is one."""
        task = self._tasks.pop(key, None)
        if task is not None:
            task.cancel()

    def close(self) -> None:
        """End them all."""
        for key in tuple(self._tasks):
            self.stop(key)

    async def _run(self, key, name, args, progress, done, failed):
        me = asyncio.current_task()

        def mine():
            return self._tasks.get(key) is me

        loop = id(asyncio.get_running_loop())
        worker = None
        try:
            async with _gate.setdefault(loop, asyncio.Semaphore(WORKERS_MOST)):
                worker = await _worker(loop)
                _put(worker.stdin, (name, args))
                await worker.stdin.drain()
                while True:
                    kind, value = await _get(worker.stdout)
                    if kind != "progress":
                        break
                    if progress and mine():
                        progress(value)
                _idle.setdefault(loop, []).append(worker)
                worker = None
            if not mine():
                return
            del self._tasks[key]
            if kind == "failed" and failed:
                failed(value)
            elif kind == "done" and done:
                try:
                    done(value)
                except Exception:  # else the person would wait for ever
                    log.exception("The result of %s.%s could not be taken up.", *name)
                    if failed:
                        failed("The calculation ended, but its result could not be shown; try again.")
        except Exception as error:
            if not isinstance(error, asyncio.IncompleteReadError | OSError):
                log.exception("%s.%s stopped.", *name)
            if mine():
                del self._tasks[key]
                if failed:
                    failed("The calculation stopped unexpectedly; try again.")
        finally:
            if worker is not None:
                with contextlib.suppress(ProcessLookupError):
                    worker.kill()


async def _worker(loop: int) -> asyncio.subprocess.Process:
    idle = _idle.setdefault(loop, [])
    while idle:
        worker = idle.pop()
        if worker.returncode is None:
            return worker
    return await asyncio.create_subprocess_exec(
        sys.executable, "-m", "sumwright.jobs", stdin=asyncio.subprocess.PIPE, stdout=asyncio.subprocess.PIPE
    )


def _put(stream, message) -> None:
    data = pickle.dumps(message)
    stream.write(_LENGTH.pack(len(data)) + data)


async def _get(stream):
    (length,) = _LENGTH.unpack(await stream.readexactly(_LENGTH.size))
    return pickle.loads(await stream.readexactly(length))


def work(source, sink) -> None:
    """The worker's side: take a job, send what it yields and returns, take the next, until the pipe closes."""
    while head := source.read(_LENGTH.size):
        (module, name), args = pickle.loads(source.read(_LENGTH.unpack(head)[0]))
        try:
            steps = getattr(importlib.import_module(module), name)(*args)
            while True:
                try:
                    _put(sink, ("progress", next(steps)))
                    sink.flush()
                except StopIteration as end:
                    _put(sink, ("done", end.value))
                    break
        except SumwrightError as error:
            _put(sink, ("failed", str(error)))
        sink.flush()


if __name__ == "__main__":
    _sink = os.fdopen(os.dup(1), "wb")
    os.dup2(2, 1)  # what a library prints must not enter the pipe
    work(sys.stdin.buffer, _sink)
