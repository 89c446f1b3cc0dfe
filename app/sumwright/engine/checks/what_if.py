"""Changed stages that advice is tried out on, remembered so that a drag does not pay twice."""

from __future__ import annotations

from functools import lru_cache

from sumwright.engine.response import Response, response
from sumwright.engine.stage import Design, replace


def at_rest(design: Design) -> Design:
    """The design with every signal at zero: the AC answers do not depend on where they are."""
    return replace(design, signals=tuple(replace(s, value=0.0) for s in design.signals))


@lru_cache(maxsize=64)
def _response(design: Design) -> Response:
    return response(design)


def response_of(design: Design) -> Response:
    """Frequency response of a changed design."""
    return _response(at_rest(design))


def slowest(design: Design) -> float | None:
    """The lowest -3 dB frequency of any signal [Hz]."""
    bands = [s.bandwidth_3db for s in response_of(design).signals]
    return min((b for b in bands if b is not None), default=None)
