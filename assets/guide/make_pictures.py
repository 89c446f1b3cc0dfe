"""Take the guide's pictures from the running sheet, so that they stay true.

    python assets/guide/make_pictures.py            all of them
    python assets/guide/make_pictures.py bench      those whose name holds the word

Needs what the tests need (`pip install -e '.[test]'`, Chromium, fonts-liberation).
"""

from __future__ import annotations

import sys
from pathlib import Path

HERE = Path(__file__).resolve().parent
sys.path.insert(0, str(HERE.parents[1] / "tests"))

from served.pictures import small, taken  # noqa: E402
from served.serving import served, settled, wait  # noqa: E402
from support.browser import chromium, fonts_are_liberation  # noqa: E402

SIZE = {"width": 1280, "height": 720}


def act(page, **what):
    page.evaluate("a => sumwright.act(a)", what)
    settled(page)


def kiln(page):
    """The kiln's damper on the sheet, as it is built."""
    act(page, do="open", text=(HERE / "kiln-damper-realised.json").read_text(encoding="utf-8"))
    wait(page, "sumwright.state.title.startsWith('Kiln')")


def short(page):
    """The first sheet with a + rail that is too low."""
    act(page, do="figure", group="supply", figure="high", text="4")


def bench(page):
    """The kiln's readings on the bench."""
    kiln(page)
    page.evaluate("location.hash = 'bench'")
    wait(page, "sumwright.state.open === 'bench' && !!document.querySelector('#f-bench')")
    settled(page)
    page.set_input_files("#f-bench input[aria-label='Readings file']", str(HERE / "kiln-damper-readings.csv"))
    page.wait_for_timeout(1500)
    page.evaluate("sumwright.fold({do: 'meter', text: '0.02 % + 0.2 mV'})")
    settled(page)
    page.evaluate("sumwright.fold({do: 'go', row: 9})")
    settled(page)


# name: what to do first, the fold
PICTURES = {
    "sheet": (None, "curves"), "short": (short, "curves"), "curves": (kiln, "curves"), "choices": (kiln, "choices"),
    "budget": (kiln, "budget"), "response": (kiln, "response"), "bench": (bench, "bench"), "log": (kiln, "log"), "report": (kiln, "report"),
}  # fmt: skip


def main(words: list[str]) -> int:
    fonts_are_liberation()
    chosen = {n: p for n, p in PICTURES.items() if not words or any(w in n for w in words)}
    with served(environment={"LOGNAME": "I. Maro", "USER": "I. Maro"}) as (_, url), chromium() as browser:
        for name, (first, fold) in chosen.items():
            page = browser.new_page(viewport=SIZE, reduced_motion="reduce")
            page.goto(f"{url}/app")
            settled(page)
            if first:
                first(page)
            picture = small(taken(page, fold, "light"))
            (HERE / f"{name}.png").write_bytes(picture)
            print(f"{name}.png  {len(picture) / 1000:.0f} kB")
            page.close()
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
