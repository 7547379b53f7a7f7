"""What is handed back: figures with their uncertainty, and notices to the person.

Plain types only; how the figures come about is known to the modules that fill them.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Notice:
    """Something a person should know about a result.

    code : short stable identifier, e.g. "several-pages"
    message : what was found, and what it does to the figures, one sentence
    remedy : what to do about it, one sentence
    """

    code: str
    message: str
    remedy: str


@dataclass(frozen=True)
class Contribution:
    """One line of an uncertainty budget.

    source : the cause, in words
    std : standard uncertainty of the property due to this cause alone, in the property's unit
    share : share of the property's variance, 0 to 1
    """

    source: str
    std: float
    share: float


@dataclass(frozen=True)
class Quantity:
    """A property with its uncertainty.

    value, unit : the estimate
    std : combined standard uncertainty, in the same unit
    interval95 : 95 % coverage interval
    pixel_bounds : the property of the outline moved inward and outward by its edge-location bound; None where moving
        the whole outline in or out says little of the property (positions, angles, ratios, lengths of outline)
    budget : causes, the largest first
    """

    value: float
    unit: str
    std: float
    interval95: tuple[float, float]
    pixel_bounds: tuple[float, float] | None = None
    budget: tuple[Contribution, ...] = ()
