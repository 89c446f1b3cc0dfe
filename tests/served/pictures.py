"""The golden pictures: what is photographed, how two pictures are compared, and the command that makes new ones.

    python -m served.pictures            (in tests/) make every picture anew
    python -m served.pictures budget     only those whose name holds the word

Look at what changed before committing it. Fonts are Liberation's, whichever
machine it is: the sheet's font stacks name them after fonts of other systems.
"""

from __future__ import annotations

import io
import re
import sys
from pathlib import Path
from typing import NamedTuple

import numpy as np
from PIL import Image
from sumwright.tokens import tokens

GOLDEN = Path(__file__).parent / "golden"
HOW = "Make it by: cd tests && python -m served.pictures {name}; look at it, then commit it."
COLOURS = 96
BLOCK = 8  # px: what moves by less than a letter is not a change of look
FAR = 22.0  # of 255: a block this far from the golden one has changed
SHARE = 0.006  # of all blocks that may have changed: hinting, antialiasing, a digit

FOLDS = ("curves", "choices", "budget", "response", "bench", "log", "report", "new")
SIZES = {"1280": (1280, 720), "1920": (1920, 1080), "1024": (1024, 768), "phone": (390, 844)}


class Shot(NamedTuple):
    """One picture: a fold at a size on a paper."""

    fold: str
    size: str
    theme: str

    @property
    def name(self) -> str:
        return f"{self.fold}-{self.size}-{self.theme}"


SHOTS = (
    *(Shot(fold, "1280", theme) for fold in FOLDS[:-1] for theme in ("light", "dark")),
    Shot("new", "1280", "light"),
    *(Shot(fold, size, "light") for size in ("1920", "1024") for fold in ("curves", "choices", "bench")),
    *(Shot("bench", "phone", theme) for theme in ("light", "dark")),
)

# What differs from one day, machine or search to the next is taken out of the picture, its place kept.
STILL = """() => {
  const style = document.createElement('style')
  style.textContent = '*, *::before, *::after { animation: none !important; transition: none !important; caret-color: transparent !important }'
  document.head.append(style)
  document.activeElement?.blur()
}"""
# Nothing that could be stopped is under way.
IDLE = """[...document.querySelectorAll('button')].every(b => b.textContent !== 'Stop' || b.hidden || b.disabled || !b.offsetParent)
  && !/weighing…|searching…/.test(document.querySelector('main').innerText)"""
UNTIMED = """() => {
  for (const e of document.querySelectorAll('#saved, .log time, .log .who')) e.style.visibility = 'hidden'
}"""


def taken(page, fold: str, theme: str) -> bytes:
    """A PNG of the fold as it stands, once nothing moves any more."""
    from .serving import settled, wait

    page.evaluate("h => { location.hash = h }", fold)
    wait(page, f"sumwright.state.open === '{fold}'")
    if page.evaluate("sumwright.state.theme") != theme:
        page.evaluate("t => sumwright.act({do: 'theme', theme: t})", theme)
        wait(page, f"document.documentElement.dataset.theme === '{theme}'")
    settled(page)
    page.wait_for_timeout(300)
    wait(page, IDLE, 90)
    page.mouse.move(2, 2)
    last = b""
    for _ in range(60):
        page.wait_for_timeout(250)
        settled(page)
        page.evaluate(UNTIMED)
        now = page.screenshot(animations="disabled")
        # What is worked out beside the page may begin only after the first wait.
        if now == last and page.evaluate(IDLE):
            return now
        last = now
    raise AssertionError(f"The fold {fold} never came to rest.")


def small(png: bytes) -> bytes:
    """The picture in its own most frequent colours, as it is kept: paper, tints and hues stay exact."""
    image = Image.open(io.BytesIO(png)).convert("RGB")
    often = [colour for _, colour in sorted(image.getcolors(1 << 24), reverse=True)[:COLOURS]]
    hues = [v for theme in ("light", "dark") for v in tokens(theme).values() if re.fullmatch("#[0-9A-F]{6}", v)]
    colours = list(dict.fromkeys([*often, *(tuple(bytes.fromhex(h[1:])) for h in hues)]))
    palette = Image.new("P", (1, 1))
    flat = [v for colour in colours for v in colour]
    palette.putpalette(flat + flat[-3:] * (256 - len(colours)))
    out = io.BytesIO()
    image.quantize(palette=palette, dither=Image.Dither.NONE).save(out, "PNG", optimize=True)
    return out.getvalue()


def blocks(png: bytes) -> np.ndarray:
    """Mean colour of each block, (rows, columns, 3)."""
    a = np.asarray(Image.open(io.BytesIO(png)).convert("RGB"), dtype=float)
    h, w = a.shape[0] // BLOCK * BLOCK, a.shape[1] // BLOCK * BLOCK
    return a[:h, :w].reshape(h // BLOCK, BLOCK, w // BLOCK, BLOCK, 3).mean(axis=(1, 3))


def changed(a: bytes, b: bytes) -> float:
    """Share of blocks in which two pictures of one size differ; 1 if their sizes differ."""
    x, y = blocks(a), blocks(b)
    if x.shape != y.shape:
        return 1.0
    # a line that stands half a block further is in the neighbour: compare with the nearest of the nine
    near = np.full(x.shape[:2], np.inf)
    padded = np.pad(y, ((1, 1), (1, 1), (0, 0)), mode="edge")
    for i in range(3):
        for j in range(3):
            shifted = padded[i : i + y.shape[0], j : j + y.shape[1]]
            near = np.minimum(near, np.abs(x - shifted).max(axis=2))
    return float((near > FAR).mean())


def photographs(browser, shots=SHOTS):
    """Take `shots`, yielding each with its PNG; a server of its own, a fresh sheet a size."""
    from support.browser import fonts_are_liberation

    from .serving import served, settled

    fonts_are_liberation()
    with served(environment={"LOGNAME": "keeper", "USER": "keeper"}) as (_, url):
        for size in SIZES:
            mine = [s for s in shots if s.size == size]
            if not mine:
                continue
            width, height = SIZES[size]
            page = browser.new_page(viewport={"width": width, "height": height}, reduced_motion="reduce")
            page.goto(f"{url}/app")
            settled(page)
            page.evaluate(STILL)
            for shot in mine:
                yield shot, taken(page, shot.fold, shot.theme)
            page.close()


def main(words: list[str]) -> int:
    shots = [s for s in SHOTS if not words or any(w in s.name for w in words)]
    from support.browser import chromium

    GOLDEN.mkdir(exist_ok=True)
    with chromium() as browser:
        for shot, png in photographs(browser, shots):
            kept = small(png)
            (GOLDEN / f"{shot.name}.png").write_bytes(kept)
            print(f"{shot.name}.png  {len(kept) / 1000:.0f} kB")
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
