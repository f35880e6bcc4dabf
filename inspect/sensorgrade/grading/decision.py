"""What was decided of a device, limit by limit."""

from dataclasses import dataclass
from typing import Literal

from sensorgrade.recipe.model import Limit

Outcome = Literal["accept", "reject", "undecided"]
# "ungraded": the recipe asks for no grade, so there was nothing to decide. It is neither a pass
# nor an open question, and it does not count as "rejected or undecided" in the exit status.
Decision = Literal["accept", "reject", "undecided", "ungraded"]


@dataclass(frozen=True, slots=True)
class LimitResult:
    """One limit of one grade held against one value.

    ``margin`` is positive inside the limit, in the limit's unit; ``margin_in_uncertainties`` the
    same over the standard uncertainty. ``probability`` is that of conformity. ``value`` is None
    when nothing was measured (then undecided). ``margin_in_uncertainties`` is None also when the
    uncertainty is 0. ``reason`` is one sentence with number, limit,
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
    """``grade`` is the best that was met, None if none. ``reasons`` by weight, weightiest first.

    ``decision`` is accept when a grade was met; undecided when none was met but one still may
    be; reject when every grade was missed; ungraded when the recipe has no grades.
    """

    grade: str | None
    decision: Decision
    reasons: tuple[str, ...]
    limits: tuple[LimitResult, ...]
