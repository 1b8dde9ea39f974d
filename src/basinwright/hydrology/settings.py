"""What the hydrology needs besides the tables."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from basinwright.confidence import Equation
from basinwright.numbers import Floats
from basinwright.project import Project
from basinwright.registry import find
from basinwright.schemes import Scheme
from basinwright.storms import DepthDurationFrequency, Storm
from basinwright.timing import BankfullRelation, bankfull_relation

FROM_DEPTHS_BY_DURATION = ("balanced", "nested")
"""Distributions that are built from a depth-duration-frequency table."""


@dataclass(frozen=True)
class Settings:
    """What the hydrology needs besides the tables.

    Parameters
    ----------
    project : Project
        The resolved project.
    scheme : Scheme
        The land-cover scheme.
    storm : Storm or None
        The design storm's distribution; None where it is built from `ddf`.
    ddf : DepthDurationFrequency or None
        Depth by duration and return period, where the project gives it.
    equations : sequence of Equation
        Regional regression equations to compare with.
    """

    project: Project
    scheme: Scheme
    storm: Storm | None
    ddf: DepthDurationFrequency | None = None
    equations: Sequence[Equation] = ()

    @property
    def relation(self) -> BankfullRelation:
        """The bankfull relation."""
        return bankfull_relation_of(self.project)

    def intensity(self) -> dict[str, Callable[[Floats], Floats]]:
        """Return the 2-year intensity [mm/h] as a function of duration [h], where a table gives it."""
        ddf = self.ddf
        period = next((text for text in ddf.return_periods if float(text) == 2.0), None) if ddf is not None else None
        if ddf is None or period is None:
            return {}

        def mm_per_h(duration_h: Floats) -> Floats:
            inside = np.clip(duration_h, ddf.durations_h[0], ddf.durations_h[-1])
            return ddf.depth_mm(inside, period) / inside

        return {"intensity_mm_per_h": mm_per_h}

    def storms(self, duration_h: float) -> list[Storm]:
        """Return the distribution of each return period, for a duration [h]."""
        section = self.project.storm
        if self.storm is not None:
            return [self.storm] * len(section.periods)
        if self.ddf is None:
            raise ValueError("no storm and no depths by duration: the project model guarantees one")
        build = find("storm", section.distribution).function
        step_h = float(self.ddf.durations_h[0])
        return [build(duration_h, step_h, self.ddf.durations_h, self.ddf.column(period)) for period in section.periods]


def bankfull_relation_of(project: Project) -> BankfullRelation:
    """Return the bankfull relation that a project names or gives."""
    width, depth = project.channel.bankfull_width, project.channel.bankfull_depth
    if project.channel.bankfull_region == "own" and width is not None and depth is not None:
        return BankfullRelation("own", (width.coefficient, width.exponent), (depth.coefficient, depth.exponent))
    return bankfull_relation(project.channel.bankfull_region)
