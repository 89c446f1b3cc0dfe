"""The wire: the one channel between the sheet in the browser and its session.

It draws nothing. Texts go up as messages and down as messages; what is drawn is
drawn by the modules under `static/`, from plain data. Down goes one text a frame:
Bokeh would take a nested dictionary apart key by key.
"""

from __future__ import annotations

import json
import math
from typing import Any, ClassVar

import numpy as np
import param
from panel.custom import JSComponent

MESSAGE_MOST = 4_000_000  # characters; a design file or a capture comes in one


class Wire(JSComponent):
    """Carries messages; `receive` is called with each one from the browser, already a dictionary."""

    receive = param.Callable(default=None, allow_None=True, precedence=-1)

    _esm = """
export function render({model, el}) {
  el.style.display = 'none'
  const wire = {
    send: text => model.send_msg(text),
    listen: heard => model.on('msg:custom', event => heard(event.data ?? event)),
  }
  window.sumwrightWire = wire
  document.dispatchEvent(new CustomEvent('sumwright:wire'))
}
"""

    _rename: ClassVar[dict[str, str | None]] = {"receive": None}

    def _handle_msg(self, data: Any) -> None:
        if self.receive is None or not isinstance(data, str) or len(data) > MESSAGE_MOST:
            return
        try:
            message = json.loads(data)
        except (ValueError, RecursionError):  # brackets enough to exhaust the reader
            return
        if isinstance(message, dict):
            self.receive(message)

    def send(self, payload: dict[str, Any]) -> None:
        """Send one frame; values that are `Packed` already go as they are."""
        self._send_msg(packed(payload))


class Packed(str):
    """JSON text, ready to stand in a payload."""

    __slots__ = ()


def packed(payload: dict[str, Any]) -> Packed:
    """A payload as JSON: arrays as lists, named tuples as objects, what is not finite as null."""
    parts = [f"{json.dumps(str(k))}:{v if isinstance(v, Packed) else _text(plain(v))}" for k, v in payload.items()]
    return Packed("{" + ",".join(parts) + "}")


def packed_plain(value: Any) -> Packed:
    """The same for what holds no named tuples: a sixth of the time, for every move of a slider."""
    try:
        return Packed(_text(value))
    except (TypeError, ValueError):  # an array, or a number that is not finite
        return Packed(_text(plain(value)))


def _text(value: Any) -> str:
    return json.dumps(value, separators=(",", ":"), allow_nan=False)


def plain(value: Any) -> Any:
    """`value` in the types JSON has; named tuples by their field names."""
    if isinstance(value, float):
        return float(f"{value:.9g}") if math.isfinite(value) else None
    if value is None or isinstance(value, str | bool | int):
        return value
    if isinstance(value, dict):
        return {str(k): plain(v) for k, v in value.items()}
    if hasattr(value, "_asdict"):
        return {k: plain(v) for k, v in value._asdict().items()}
    if isinstance(value, list | tuple | set | frozenset):
        return [plain(v) for v in value]
    if isinstance(value, np.ndarray):
        return [plain(v) for v in value.tolist()]
    if isinstance(value, np.generic):
        return plain(value.item())
    raise TypeError(f"a {type(value).__name__} cannot be sent to the sheet")


__all__ = ["MESSAGE_MOST", "Packed", "Wire", "packed", "packed_plain", "plain"]
