"""How fast the sheet follows the hand, beside the floor measured in the same run.

Run by hand: `python tests/benchmarks/page_speed.py [--moves 200]`. It starts the
server, drives it in Chromium and prints; nothing is asserted, for other work on the
machine moves every millisecond here. The floor is the same path (an input event, the
wire, the server, back, painted) moving one figure of one line.
"""

from __future__ import annotations

import argparse
import os
import statistics
import sys
from pathlib import Path

HERE = Path(__file__).resolve().parent
ROOT = HERE.parents[1]
sys.path.insert(0, str(ROOT))
from tests.served.serving import READY, served, wait  # noqa: E402
from tests.support.browser import chromium  # noqa: E402

MOVES = """
async n => {
  const sleep = ms => new Promise(r => setTimeout(r, ms))
  const slider = document.querySelector('input[type=range][data-v=north]')
  const pump = () => requestAnimationFrame(pump); pump()
  const took = []
  for (let k = 0; k < n; k++) {
    const t0 = performance.now()
    const shown = new Promise(r => document.addEventListener('sumwright:shown', () => r(performance.now() - t0), {once: true}))
    slider.value = (k * 0.37) % 9.5 + 0.2
    slider.dispatchEvent(new Event('input', {bubbles: true}))
    took.push(await Promise.race([shown, sleep(4000).then(() => 4000)]))
    await sleep(30 + Math.random() * 17)
  }
  return took
}
"""
DRAG = """
async seconds => {
  const slider = document.querySelector('input[type=range][data-v=north]')
  const line = sumwright.line, lags = [], when = new Map(), shown = []
  let last = 0
  const heard = e => { const t = performance.now(); if (when.has(e.detail)) lags.push([t - when.get(e.detail), t]); last = t }
  document.addEventListener('sumwright:shown', heard)
  // the moment the hand was at the value a frame shows: that of the newest event before the frame's acts were sent
  const send = line.pump.bind(line)
  let moved = 0
  line.pump = () => { const before = line.seq; send(); if (line.seq !== before) when.set(line.seq, moved) }
  const t0 = performance.now(), n = Math.round(seconds * 60)
  let k = 0
  await new Promise(done => { const timer = setInterval(() => {
    const due = Math.floor((performance.now() - t0) / 1000 * 60)
    while (k <= due && k < n) { moved = performance.now(); slider.value = 0.2 + (k % 180) * 0.05; slider.dispatchEvent(new Event('input', {bubbles: true})); k++ }
    if (k >= n) { clearInterval(timer); done() }
  }, 4) })
  const end = performance.now()
  while ((line.busy || line.queue.length) && performance.now() - end < 8000) await new Promise(r => setTimeout(r, 2))
  const settled = performance.now() - end
  document.removeEventListener('sumwright:shown', heard)
  line.pump = send
  const half = lags.filter(l => l[1] < t0 + seconds * 500).map(l => l[0])
  return {lags: lags.map(l => l[0]), first_half: half, settled, frames: lags.length}
}
"""


def quantile(values, q):
    ordered = sorted(values)
    return ordered[min(len(ordered) - 1, round(q * (len(ordered) - 1)))] if ordered else float("nan")


def cpu_seconds(pid: int) -> float:
    """Processor time of a process so far."""
    fields = Path(f"/proc/{pid}/stat").read_text().rsplit(")", 1)[1].split()
    return (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")


def paint(browser, url, ready):
    """Cold: milliseconds to the first contentful paint and until `ready`, with a fresh cache."""
    context = browser.new_context(viewport={"width": 1280, "height": 720})
    page = context.new_page()
    page.goto(url, wait_until="commit")
    wait(page, ready, 60)
    first, done = page.evaluate(
        "() => [performance.getEntriesByType('paint').find(p => p.name === 'first-contentful-paint')?.startTime ?? NaN, performance.now()]"
    )
    received = page.evaluate(
        "() => performance.getEntriesByType('resource').reduce((s, r) => s + r.encodedBodySize, 0)"
    )
    context.close()
    return first, done, received


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--moves", type=int, default=200)
    parser.add_argument("--seconds", type=float, default=3.0, help="length of the drag")
    moves, seconds = parser.parse_args().moves, parser.parse_args().seconds
    with served(str(HERE / "floor"), str(HERE / "bare")) as (server, url), chromium() as browser:
        figures = {}
        for name, path in (("floor", "floor"), ("sheet", "app")):
            page = browser.new_page(viewport={"width": 1280, "height": 720})
            page.goto(f"{url}/{path}")
            wait(page, READY, 60)
            page.wait_for_timeout(2500)
            page.evaluate(MOVES, 20)
            before = cpu_seconds(server.pid)
            took = page.evaluate(MOVES, moves)
            spent = (cpu_seconds(server.pid) - before) / moves * 1e3
            drag = page.evaluate(DRAG, seconds)
            figures[name] = (took, drag, spent)
            page.close()
        print(f"load {os.getloadavg()[0]:.1f}; {moves} moves from the input event to everything in view painted")
        for name, (took, drag, spent) in figures.items():
            print(
                f"  {name}: p50 {quantile(took, 0.5):.0f} ms, p95 {quantile(took, 0.95):.0f} ms; "
                f"server CPU {spent:.1f} ms a move"
            )
            print(
                f"    drag of {seconds:g} s at 60 events/s: {drag['frames']} frames, trails p50 {quantile(drag['lags'], 0.5):.0f}, "
                f"p95 {quantile(drag['lags'], 0.95):.0f} ms (first half p95 {quantile(drag['first_half'], 0.95):.0f}), "
                f"settles in {drag['settled']:.0f} ms"
            )
        floor, sheet = figures["floor"][0], figures["sheet"][0]
        print(
            f"  sheet / floor: p50 {quantile(sheet, 0.5) / quantile(floor, 0.5):.2f}, p95 {quantile(sheet, 0.95) / quantile(floor, 0.95):.2f}"
        )
        idle = "!!(window.Bokeh?.documents?.length && Bokeh.documents[0].is_idle)"
        painted = {"bare": [], "sheet": []}
        before, opened = cpu_seconds(server.pid), 0
        for _ in range(5):
            painted["bare"].append(paint(browser, f"{url}/bare", idle))
            start = cpu_seconds(server.pid)
            painted["sheet"].append(paint(browser, f"{url}/app", READY))
            opened += cpu_seconds(server.pid) - start
        print("cold first paint, median of 5: first contentful paint, everything painted, bytes fetched")
        for name, times in painted.items():
            print(
                f"  {name}: {statistics.median(t[0] for t in times):.0f} ms, {statistics.median(t[1] for t in times):.0f} ms, {times[0][2] / 1e6:.2f} MB"
            )
        print(
            f"  sheet / bare, everything painted: {statistics.median(t[1] for t in painted['sheet']) / statistics.median(t[1] for t in painted['bare']):.2f}"
        )
        print(f"  server CPU to open a sheet: {opened / 5 * 1e3:.0f} ms")


if __name__ == "__main__":
    main()
