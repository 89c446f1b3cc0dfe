"""The look of every fold against its golden picture, so that a change of look is seen and meant."""

import io

import pytest
from PIL import Image, ImageDraw

from .pictures import GOLDEN, HOW, SHARE, SHOTS, changed, photographs, small

pytestmark = pytest.mark.browser


def test_every_fold_looks_as_it_did(browser, tmp_path):
    """One test, so that one worker takes all the pictures with one server."""
    missing = [s.name for s in SHOTS if not (GOLDEN / f"{s.name}.png").exists()]
    assert not missing, f"{', '.join(missing)}: no golden picture. {HOW.format(name=missing[0])}"
    other = []
    for shot, png in photographs(browser):
        share = changed(png, (GOLDEN / f"{shot.name}.png").read_bytes())
        if share > SHARE:
            (tmp_path / f"{shot.name}.png").write_bytes(png)
            other.append(f"{shot.name} in {share:.1%} of its area")
    assert not other, (
        f"Looks different: {'; '.join(other)}. It is now as in {tmp_path}. If that is meant: {HOW.format(name='WORD')}"
    )


def test_there_is_no_picture_of_what_is_gone():
    assert {p.stem for p in GOLDEN.glob("*.png")} == {s.name for s in SHOTS}


def drawn(shift=0, colour="black", extra=False):
    image = Image.new("RGB", (640, 400), "#F4F6F4")
    pen = ImageDraw.Draw(image)
    for i in range(12):
        pen.text((20 + shift, 20 + 28 * i), f"margin {i}  +0.{i}50 V", fill=colour)
    if extra:
        pen.rectangle((300, 100, 420, 180), fill="#B3122F")
    out = io.BytesIO()
    image.save(out, "PNG")
    return out.getvalue()


def test_the_comparison_forgives_a_pixel_and_sees_a_change():
    assert changed(drawn(), drawn()) == 0
    assert changed(drawn(shift=1), drawn()) <= SHARE
    assert changed(small(drawn()), drawn()) <= SHARE
    assert changed(drawn(extra=True), drawn()) > SHARE
    assert changed(drawn(colour="#B3122F"), drawn()) > SHARE
