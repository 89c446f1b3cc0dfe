"""Everything the engine can say of one design, computed when first asked for.

A drag changes one signal's value and nothing else: `Analysis.follow` hands the
answers that do not depend on the values on to the next analysis, so a move costs
the operating point, the curves and the present column of the budget alone.
"""

from __future__ import annotations

from functools import cached_property

import numpy as np

from ..errors import InvalidDesign
from .nodes import Network, Solution
from .stage import Design, replace

# Answers that depend on the design but not on where the signals are just now.
_OF_THE_STAGE = (
    "unit_responses",
    "linear",
    "headroom",
    "cable_out",
    "ac",
    "noise",
    "power",
    "error_influences",
    "stage_checks",
)


class Analysis:
    """Cached results for one realised design.

    Parameters
    ----------
    design : Design
    unplugged : iterable of str, optional
        Signals whose cable is out.
    forerunner : Analysis, optional
        An earlier analysis; what it knows that still holds is taken over.

    Raises
    ------
    InvalidDesign
        If the design has no cells.
    """

    def __init__(self, design: Design, unplugged=(), forerunner: Analysis | None = None):
        if not design.cells:
            raise InvalidDesign(
                "cells is missing: the design is not realised yet, so there is nothing to analyse; realise it first.",
                "cells",
            )
        self.design = design
        self.unplugged = frozenset(unplugged)
        self.net = Network(design, self.unplugged)
        if forerunner is not None and self._same_stage(forerunner):
            for name in _OF_THE_STAGE:
                if name in forerunner.__dict__:
                    self.__dict__[name] = forerunner.__dict__[name]
            kept = forerunner.net.__dict__.get("_kept")
            if kept is not None:
                self.net.__dict__["_kept"] = kept

    def _same_stage(self, other: Analysis) -> bool:
        if self.unplugged != other.unplugged:
            return False
        if self.design is other.design:
            return True
        mine, theirs = self.design.signals, other.design.signals
        if len(mine) != len(theirs):
            return False
        moved = tuple(replace(b, value=a.value) for a, b in zip(mine, theirs, strict=True))
        return replace(other.design, signals=moved) == self.design

    def follow(self, design: Design, unplugged=()) -> Analysis:
        """The analysis of `design`, taking over what still holds."""
        return Analysis(design, unplugged, self)

    @property
    def values(self) -> np.ndarray:
        """(n,) present signal voltages [V]."""
        return self.net.values[: self.net.signal_count]

    @cached_property
    def linear(self) -> Solution:
        """`operating_point.influence`: every node per volt of every source."""
        return Solution(*(x[0, :, : self.net.signal_count + 1] for x in self.unit_responses))

    @cached_property
    def unit_responses(self) -> Solution:
        """`budget.unit_responses`: one solution of the node equations that most answers are made of."""
        from .budget import unit_responses

        return unit_responses(self.net)

    @cached_property
    def dc(self):
        from .operating_point import operating_point

        return operating_point(self.design, net=self.net, linear=self.linear)

    @cached_property
    def headroom(self):
        from .headroom import headroom

        return headroom(self.design, net=self.net, linear=self.linear)

    @cached_property
    def curves(self):
        from .curves import transfer_curves

        return transfer_curves(self.design, net=self.net, linear=self.linear)

    @cached_property
    def cable_out(self):
        from .cable_out import cable_out

        return cable_out(self.design, net=self.net)

    @cached_property
    def errors(self):
        """{"present" | "highest" | "lowest": error budget}, without Monte Carlo."""
        from .budget import error_budgets

        return error_budgets(self)

    @cached_property
    def error_influences(self):
        """`budget.influences`: every quantity at its limits, before the values are known."""
        from .budget import influences

        return influences(self.net, self.unit_responses)

    @cached_property
    def ac(self):
        from .response import response

        return response(self)

    @cached_property
    def noise(self):
        from .noise import noise

        return noise(self)

    @cached_property
    def power(self):
        from .heat import heat

        return heat(self)

    @cached_property
    def stage_checks(self):
        """The checks that stay as they are while signals move within their ranges."""
        from .checks import stage_checks

        return stage_checks(self)

    @cached_property
    def checks(self):
        """Every check, tightest first."""
        from .checks import run_checks

        return run_checks(self)
