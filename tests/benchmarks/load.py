"""Many people on one server: opening, dragging, a long computation beside it, leaving; and a soak. Run by hand.

    python tests/benchmarks/load.py                       50 open sheets, 10 of them dragging, one process
    python tests/benchmarks/load.py --processes 2
    python tests/benchmarks/load.py --soak 15             minutes of coming, dragging and leaving

The people are websockets that speak Bokeh's own protocol and acknowledge frames as the page does: a new move is sent
only when the frame of the one before has come back. What a browser takes to paint is not in these figures (page_speed.py has it).
Times depend on the machine: read the ratios, the counts and what grows.
"""

from __future__ import annotations

import argparse
import asyncio
import json
import math
import os
import re
import signal
import socket
import statistics
import subprocess
import sys
import tempfile
import time
import urllib.request
from pathlib import Path

from tornado.httpclient import AsyncHTTPClient, HTTPRequest
from tornado.websocket import websocket_connect

APP = Path(__file__).parents[2] / "app"
TICK = os.sysconf("SC_CLK_TCK")
PAGE = os.sysconf("SC_PAGE_SIZE")


class Server:
    """The served sheet with a store of its own, and what its processes used."""

    def __init__(self, processes: int):
        with socket.socket() as s:
            s.bind(("127.0.0.1", 0))
            self.port = s.getsockname()[1]
        self.data = tempfile.mkdtemp(prefix="sumwright-load-")
        environment = os.environ | {
            "SUMWRIGHT_DATA": self.data,
            "SUMWRIGHT_PORT": str(self.port),
            "SUMWRIGHT_LOG_LEVEL": "warning",
        }
        self.process = subprocess.Popen(
            [sys.executable, "-m", "sumwright.command", "serve", "--processes", str(processes)],
            env=environment,
            start_new_session=True,
        )
        for _ in range(300):
            try:
                urllib.request.urlopen(f"http://127.0.0.1:{self.port}/health", timeout=2).read()
                break
            except OSError:
                time.sleep(0.2)

    def pids(self) -> list[int]:
        """The server and its forks, without the workers of long computations."""
        found = [self.process.pid]
        for stat in Path("/proc").glob("[0-9]*/stat"):
            try:
                fields = stat.read_text().rsplit(") ", 1)[1].split()
                line = (stat.parent / "cmdline").read_bytes()
            except OSError:
                continue
            if int(fields[1]) == self.process.pid and b"sumwright.jobs" not in line:
                found.append(int(stat.parent.name))
        return found

    def cpu(self) -> float:
        """CPU seconds used so far."""
        total = 0
        for pid in self.pids():
            fields = Path(f"/proc/{pid}/stat").read_text().rsplit(") ", 1)[1].split()
            total += int(fields[11]) + int(fields[12])
        return total / TICK

    def memory(self) -> float:
        """Resident MB, all processes."""
        return sum(int(Path(f"/proc/{pid}/statm").read_text().split()[1]) for pid in self.pids()) * PAGE / 1e6

    def stop(self) -> None:
        os.killpg(self.process.pid, signal.SIGTERM)
        self.process.wait(20)


class Person:
    """One open sheet."""

    def __init__(self, server: Server):
        self.server, self.seq, self.busy = server, 0, None
        self.latencies: list[tuple[float, float]] = []  # (when, s)

    async def come(self) -> float:
        """Open the page as a browser does; seconds until the document is there."""
        start = time.perf_counter()
        place = f"127.0.0.1:{self.server.port}"
        answer = await AsyncHTTPClient().fetch(f"http://{place}/app", request_timeout=120)
        token = re.search(r'"token":\s*"([^"]+)"', answer.body.decode())[1]
        self.socket = await websocket_connect(
            HTTPRequest(f"ws://{place}/app/ws", headers={"Origin": f"http://{place}"}, request_timeout=120),
            subprotocols=["bokeh", token], max_message_size=50_000_000,
        )  # fmt: skip
        # As browsers do: else each message waits 40 ms for a delayed acknowledgement.
        self.socket.protocol.set_nodelay(True)
        await self._message()  # ACK
        await self._send("PULL-DOC-REQ", "{}")
        while True:
            header, content = await self._message()
            if header["msgtype"] == "PULL-DOC-REPLY":
                break
        self.wire = _wire(json.loads(content)["doc"])
        self.reader = asyncio.ensure_future(self._listen())
        return time.perf_counter() - start

    async def _send(self, kind: str, content: str) -> None:
        for part in (json.dumps({"msgid": f"{id(self)}-{time.monotonic_ns()}", "msgtype": kind}), "{}", content):
            await self.socket.write_message(part)

    async def _message(self):
        parts = [await self.socket.read_message() for _ in range(3)]
        if None in parts:
            raise ConnectionError("the server closed the websocket")
        header = json.loads(parts[0])
        for _ in range(2 * header.get("num_buffers", 0)):
            await self.socket.read_message()
        return header, parts[2]

    async def _listen(self) -> None:
        while True:
            _, content = await self._message()
            if self.busy and f'\\"seq\\":{self.seq}' in content and not self.busy.done():
                self.busy.set_result(None)

    async def act(self, *acts: dict) -> float:
        """Send acts and wait for the frame that answers them; seconds it took."""
        self.seq += 1
        self.busy = asyncio.get_running_loop().create_future()
        start = time.perf_counter()
        data = json.dumps({"seq": self.seq, "acts": list(acts)})
        event = {
            "type": "event",
            "name": "data_event",
            "values": {"type": "map", "entries": [["model", {"id": self.wire}], ["data", data]]},
        }
        await self._send(
            "PATCH-DOC", json.dumps({"events": [{"kind": "MessageSent", "msg_type": "bokeh_event", "msg_data": event}]})
        )
        await asyncio.wait_for(self.busy, 60)
        took = time.perf_counter() - start
        self.latencies.append((time.perf_counter(), took))
        return took

    async def drag(self, seconds: float) -> None:
        """Move a slider at up to 60 events a second; a move waits for the frame before it, the newest value goes."""
        end, k = time.perf_counter() + seconds, 0
        while (now := time.perf_counter()) < end:
            k += 1
            await self.act({"do": "value", "signal": "north", "value": 5 + 4.9 * math.sin(now)})
            await asyncio.sleep(max(0.0, 1 / 60 - (time.perf_counter() - now)))
        await self.act({"do": "let_go"})

    def go(self) -> None:
        self.reader.cancel()
        self.socket.close()


def _wire(doc: dict) -> str:
    """The id of the wire's model: the component whose script speaks of it."""
    found: list[str] = []

    def walk(value):
        if isinstance(value, dict):
            if "sumwrightWire" in str(value.get("attributes", {}).get("esm", "")):
                found.append(value["id"])
            for inner in value.values():
                walk(inner)
        elif isinstance(value, list):
            for inner in value:
                walk(inner)

    walk(doc)
    return found[0]


def spread(values: list[float]) -> str:
    """p50 / p95 in milliseconds."""
    values = sorted(values)
    return f"{statistics.median(values) * 1e3:6.1f} / {values[min(len(values) - 1, round(0.95 * (len(values) - 1)))] * 1e3:6.1f} ms"


async def load(server: Server, people: int, dragging: int, seconds: float) -> None:
    print(
        f"{people} open sheets, {dragging} dragging for {seconds:g} s, {len(server.pids())} processes of the server, load {os.getloadavg()[0]:.1f}"
    )
    base, start = server.memory(), server.cpu()
    warm = Person(server)
    await warm.come()
    first = server.cpu() - start
    everybody, took = [warm], []
    start, before = server.cpu(), server.memory()
    for _ in range(people - 1):
        everybody.append(Person(server))
        took.append(await everybody[-1].come())
    opened = server.cpu() - start
    print(f"open: CPU {opened / (people - 1):.3f} s a sheet (the first {first:.2f} s), {spread(took)} until drawn, "
          f"memory {base:.0f} MB at start, {(server.memory() - before) / (people - 1):.2f} MB a session")  # fmt: skip

    alone = Person(server)
    await alone.come()
    start = server.cpu()
    await alone.drag(seconds / 2)
    n = len(alone.latencies)
    print(
        f"one drags:  {n / seconds * 2:5.1f} frames/s, {spread([t for _, t in alone.latencies])}, CPU {(server.cpu() - start) / n * 1e3:.1f} ms a move"
    )

    start, begun = server.cpu(), time.perf_counter()
    await asyncio.gather(*(p.drag(seconds) for p in everybody[:dragging]))
    used, every = server.cpu() - start, [pair for p in everybody[:dragging] for pair in p.latencies]
    third = seconds / 3
    early = [t for at, t in every if at - begun < third]
    late = [t for at, t in every if at - begun > 2 * third]
    rates = sorted(len(p.latencies) / seconds for p in everybody[:dragging])
    print(f"{dragging} drag:    {rates[0]:.1f} to {rates[-1]:.1f} frames/s each, first third {spread(early)}, last third {spread(late)} "
          f"(x{statistics.median(late) / statistics.median(early):.2f}), CPU {used / len(every) * 1e3:.1f} ms a move")  # fmt: skip
    print(f"            one core carries {1 / (used / len(every)) / 25:.0f} people dragging at 25 frames/s")

    others = everybody[dragging : dragging + 5]
    for p in others:
        p.latencies.clear()
    begun = time.perf_counter()
    await alone.act({"do": "turn", "fold": "choices"})  # which begins its search
    answers = []
    while time.perf_counter() - begun < seconds / 2:
        for p in others:
            answers.append(
                await p.act({"do": "value", "signal": "north", "value": 5 + 4.9 * math.sin(time.perf_counter())})
            )
            await asyncio.sleep(0.02)
    print(f"beside a long computation: {spread(answers)} to answer the others")

    for p in [*everybody, alone]:
        p.go()
    full = server.memory()
    await asyncio.sleep(45)  # Bokeh looks for sessions that nobody has open every 17 s
    print(f"memory with all there {full:.0f} MB, after they left {server.memory():.0f} MB (reused, not all given back)")


async def soak(server: Server, minutes: float) -> None:
    """People come, drag and leave; the memory after each round says whether anything stays."""
    end = time.perf_counter() + minutes * 60
    rounds = 0
    while time.perf_counter() < end:
        people = [Person(server) for _ in range(10)]
        for p in people:
            await p.come()
        await asyncio.gather(*(p.drag(5) for p in people))
        every = [t for p in people for _, t in p.latencies]
        for p in people:
            p.go()
        await asyncio.sleep(20)
        rounds += 1
        print(f"{rounds * 10:5d} sessions so far: memory {server.memory():6.1f} MB, moves {spread(every)}", flush=True)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--people", type=int, default=50)
    parser.add_argument("--dragging", type=int, default=10)
    parser.add_argument("--seconds", type=float, default=12.0)
    parser.add_argument("--processes", type=int, default=1)
    parser.add_argument("--soak", type=float, default=0.0, metavar="MINUTES")
    args = parser.parse_args()
    server = Server(args.processes)
    try:
        asyncio.run(soak(server, args.soak) if args.soak else load(server, args.people, args.dragging, args.seconds))
    finally:
        server.stop()


if __name__ == "__main__":
    main()
