"""How many frames each limit needs so that a device near it can be decided."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from math import inf
from typing import Any

from sensorgrade.grading.conformity import guard_factor, normal_probability
from sensorgrade.grading.expected_uncertainty import (
    FIELDS,
    FORMULAS,
    HOT,
    ExpectedDevice,
    FrameSet,
    hot_pixels_uncertainty,
)
from sensorgrade.recipe.model import Limit, Recipe
from sensorgrade.wording import number_text

STEPS = (2, 3, 4, 6, 8, 12, 16, 24, 32, 48, 64, 96, 128, 192, 256)
# Which parts of a frame set a limit depends on; the others stay as they are given.
PARTS = {
    "conversion_gain": ("pairs", "levels"),
    "read_noise": ("bias", "pairs"),
    "dark_current": ("bias", "darks", "dark_exposure"),
    "dsnu": ("darks",),
    "prnu": ("flats",),
    "saturation_capacity": ("levels",),
    "linearity_error": ("pairs", "levels"),
    HOT: ("bias", "darks", "dark_exposure"),
}


@dataclass(frozen=True, slots=True)
class LimitPlan:
    """What one limit needs.

    ``distance`` is how far inside the limit the device is taken to lie, in the limit's unit;
    ``needed`` the standard uncertainty that decides it; ``given`` that of the set at hand (None
    where the set cannot measure it at all), ``decidable`` the least distance that the set at
    hand decides, and ``chance`` that of deciding this device with it. ``enough`` is the smallest
    set found that does, None when none of the sizes tried does; ``note`` says what stands in the
    way, or that there is no formula for this limit.
    """

    grade: str
    limit: Limit
    distance: float
    needed: float
    given: float | None
    decidable: float | None
    chance: float | None
    enough: FrameSet | None
    note: str


def frame_plan(
    recipe: Recipe,
    device: ExpectedDevice,
    *,
    given: FrameSet,
    distance: float = 10.0,
    power: float = 90.0,
    longest_dark: float = 600.0,
) -> tuple[LimitPlan, ...]:
    """Plan the frames of every limit of a recipe.

    Parameters
    ----------
    recipe : Recipe
        Its limits, and the confidence of its decision rule.
    device : ExpectedDevice
        What the device is like where the limit itself does not say.
    given : FrameSet
        The set at hand, which a limit's own part is enlarged from.
    distance : float [%]
        How far inside a limit the device lies, of the limit.
    power : float [%]
        Chance with which such a device is to be decided.
    longest_dark : float [s]
        Darks are not planned longer than this.

    Notes
    -----
    A reading y ~ N(true, u) is decided when it lies z(confidence) u inside the limit, which a
    device at distance d does with probability Phi(d/u - z(confidence)). For the chance asked,
    u = d / (z(confidence) + z(power)). Simple acceptance has no guard band: the same u then makes
    the wrong decision with no more than the chance left by confidence and power together.
    """
    reach = guard_factor(recipe.decision.confidence) + guard_factor(power)
    return tuple(
        _planned(level.name, limit, device, given, distance, reach, recipe, longest_dark)
        for level in recipe.grades
        for limit in level.limits
    )


def smallest_set(
    limit: Limit,
    device: ExpectedDevice,
    *,
    given: FrameSet,
    needed: float,
    longest_dark: float,
) -> FrameSet | None:
    """The set with the fewest frames (then the shortest darks) that reaches ``needed``.

    Only the parts that the limit depends on are varied, from 2 frames to 256 in steps of about
    one half; None when none of these sets reaches it.
    """
    reaching = [
        taken
        for taken in _sets(PARTS[limit.name], given, longest_dark)
        if expected_uncertainty(limit, device, taken) <= needed
    ]
    return min(reaching, key=lambda taken: (taken.frames, taken.dark_exposure), default=None)


def expected_uncertainty(limit: Limit, device: ExpectedDevice, taken: FrameSet) -> float:
    """Standard uncertainty [the limit's unit] of a device whose value is the limit's bound."""
    if limit.name == HOT:
        return hot_pixels_uncertainty(device, taken, expected=max(limit.bound, 1.0))
    if limit.name in FIELDS:
        own: dict[str, Any] = {FIELDS[limit.name]: limit.bound}
        device = replace(device, **own)
    return FORMULAS[limit.name](device, taken)


def undecided_share(
    values: Sequence[float], *, bound: float, standard_uncertainty: float, confidence: float
) -> float:
    """Share of devices with these true values that a reading will leave undecided.

    Those whose reading falls within z(confidence) u of the bound, by the non-binary rule.
    """
    z = guard_factor(confidence)
    chances = [
        normal_probability((bound - value) / standard_uncertainty + z)
        - normal_probability((bound - value) / standard_uncertainty - z)
        for value in values
    ]
    return sum(chances) / len(chances)


def _planned(
    grade: str,
    limit: Limit,
    device: ExpectedDevice,
    given: FrameSet,
    distance: float,
    reach: float,
    recipe: Recipe,
    longest_dark: float,
) -> LimitPlan:
    away = distance / 100.0 * abs(limit.bound)
    needed = away / reach
    if limit.name != HOT and limit.name not in FORMULAS:
        note = "no formula foretells its uncertainty; take a small lot and see"
        return LimitPlan(grade, limit, away, needed, None, None, None, None, note)
    if away == 0.0:
        note = "a limit of 0 leaves no distance; only a device without doubt meets it"
        return LimitPlan(grade, limit, away, needed, None, None, None, None, note)
    now = expected_uncertainty(limit, device, given)
    enough: FrameSet | None = given
    note = ""
    if now > needed:
        enough = smallest_set(limit, device, given=given, needed=needed, longest_dark=longest_dark)
        if enough is None:
            note = (
                f"no set of up to {STEPS[-1]} of its frames reaches {number_text(needed, 2)};"
                " what it rests on besides (the gain, the lamp, the level's scatter) sets the floor"
            )
    known = now < inf
    chance = normal_probability(away / now - guard_factor(recipe.decision.confidence))
    return LimitPlan(
        grade,
        limit,
        away,
        needed,
        now if known else None,
        reach * now if known else None,
        chance if known else None,
        enough,
        note,
    )


def _sets(parts: tuple[str, ...], given: FrameSet, longest_dark: float) -> Iterator[FrameSet]:
    """Sets that differ from the given one in ``parts`` only, none of them smaller in any part."""
    exposures = [given.dark_exposure] + [
        time
        for time in (given.dark_exposure * 2.0**k for k in range(1, 12))
        if time <= longest_dark
    ]
    choices: dict[str, Sequence[float]] = {
        part: exposures
        if part == "dark_exposure"
        else [getattr(given, part)] + [step for step in STEPS if step > getattr(given, part)]
        for part in parts
    }

    def chosen(taken: FrameSet, left: tuple[str, ...]) -> Iterator[FrameSet]:
        if not left:
            yield taken
            return
        for amount in choices[left[0]]:
            larger: dict[str, Any] = {left[0]: amount}
            yield from chosen(replace(taken, **larger), left[1:])

    yield from chosen(given, parts)
