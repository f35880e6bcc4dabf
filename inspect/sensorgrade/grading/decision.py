"""What was decided of a device, limit by limit."""

from dataclasses import dataclass
from typing import Literal

from sensorgrade.recipe.model import Limit

Outcome = Literal["accept", "reject", "undecided"]


@dataclass(frozen=True, slots=True)
class LimitResult:
    """One limit of one grade held against one value.

    ``margin`` is positive inside the limit, in the limit's unit; ``margin_in_uncertainties`` the
    same over the standard uncertainty. ``probability`` is that of conformity. ``value`` is None
    when nothing was measured (then undecided). ``reason`` is one sentence with number, limit,
    margin and place.
    """

    grade: str
    limit: Limit
    scope: str
    value: float | None
    standard_uncertainty: float | None
    margin: float | None
    margin_in_uncertainties: float | None
    probability: float | None
    outcome: Outcome
    reason: str


@dataclass(frozen=True, slots=True)
class Graded:
    """``grade`` is the best that was met, None if none. ``reasons`` by weight, weightiest first."""

    grade: str | None
    decision: Outcome
    reasons: tuple[str, ...]
    limits: tuple[LimitResult, ...]
