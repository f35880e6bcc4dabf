"""Frames that are not what they say: each check gives suspicions about single frames.

Levels are compared with what the device's other frames show, never with fixed numbers, save that
a difference must be more than `NOTABLE` DN and `SIGMAS` times the noise of one pixel to count.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.masters.sketch import Sketch

NOTABLE = 20.0  # DN
SIGMAS = 10.0
DARK_SCATTER = 0.3  # of a dark's signal, by which one frame of a stack may differ
LAMP_SCATTER = 2.0  # factor by which one flat of a stack may differ
LEAST_LIGHT = 0.1  # of the light expected from the other flats
SIGNIFICANT = 8.0  # standard deviations of a correlation of patterns
LIGHT_SHARE = 0.05  # of a flat's signal: what a dark must reach to be taken for a flat
OVERSCAN_SHARE = 0.05  # of the signal, by which an overscan may follow it


@dataclass(frozen=True, slots=True)
class Suspicion:
    """What is wrong with one frame, as a sentence without its name, and what to do."""

    sketch: Sketch
    seen: str
    remedy: str


@dataclass(frozen=True, slots=True)
class Reference:
    """What the device's frames have in common: level without charge and noise [DN]."""

    zero: float | None
    noise: float

    @property
    def notable(self) -> float:
        """A difference of levels that means something [DN]."""
        return max(SIGMAS * self.noise, NOTABLE)


def reference(sketches: Sequence[Sketch]) -> Reference:
    """Level and noise from bias, else dark frames; ``zero`` is None when there are neither."""
    for kind in ("bias", "dark"):
        found = [s for s in sketches if s.frame.kind == kind and not s.constant]
        if found:
            levels = [s.level for s in found]
            zero = float(np.median(levels)) if kind == "bias" else min(levels)
            return Reference(zero, float(np.median([s.noise for s in found])))
    noises = [s.noise for s in sketches if s.noise > 0]
    return Reference(None, min(noises, default=1.0))


def broken(sketches: Sequence[Sketch]) -> Iterator[Suspicion]:
    """Frames without variance or with samples that are no numbers."""
    top = max((s.highest for s in sketches), default=0.0)
    for s in sketches:
        if not s.finite:
            yield Suspicion(s, "holds samples that are no numbers", "take the frame again")
        elif s.constant and not (s.frame.kind == "flat" and s.highest == top):
            seen = f"zero variance: every sample looked at is {s.lowest:g} DN"
            yield Suspicion(s, seen, "check the converter and its cable, take the frame again")


def identical(sketches: Sequence[Sketch]) -> Iterator[Suspicion]:
    """Frames whose samples are those of an earlier one."""
    first: dict[bytes, Sketch] = {}
    for s in sketches:
        if s.constant:
            continue
        other = first.setdefault(s.digest, s)
        if other is not s:
            seen = f"identical to {other.frame.label}: the same frame under two names"
            yield Suspicion(s, seen, "remove one of them")


def lit(sketches: Sequence[Sketch], known: Reference) -> Iterator[Suspicion]:
    """Bias and dark frames that hold light, and darks out of line with their stack."""
    yield from _unlike_fellows(sketches, known)
    biases = [s for s in sketches if s.frame.kind == "bias"]
    darks = [s for s in sketches if s.frame.kind == "dark"]
    if biases and darks:
        level = float(np.median([s.level for s in biases]))
        least = min(s.level for s in darks)
        if level - least > known.notable:
            seen = (
                f"kind contradicted: the bias frames read {level - least:.0f} DN more than a dark;"
                " there is light in them"
            )
            for s in biases:
                yield Suspicion(s, seen, "cover the sensor and take the bias frames again")
    yield from _flats_by_pattern(sketches, known)


def _unlike_fellows(sketches: Sequence[Sketch], known: Reference) -> Iterator[Suspicion]:
    for stack in _stacks(sketches, ("bias", "dark")):
        if len(stack) < 3:
            continue
        middle = float(np.median([s.level for s in stack]))
        signal = 0.0 if known.zero is None else abs(middle - known.zero)
        limit = max(known.notable, DARK_SCATTER * signal)
        for s in stack:
            off = s.level - middle
            if abs(off) > limit:
                way = "more" if off > 0 else "less"
                seen = (
                    f"kind contradicted: reads {abs(off):.0f} DN {way} than its fellow"
                    f" {s.frame.kind} frames"
                )
                cause = "look for light" if off > 0 else "check kind and exposure"
                yield Suspicion(s, seen, f"{cause}, take the frame again")


def _flats_by_pattern(sketches: Sequence[Sketch], known: Reference) -> Iterator[Suspicion]:
    """Bias and dark frames whose fixed pattern is the flats', as strong as their light."""
    flats = [s for s in sketches if s.frame.kind == "flat"]
    biases = [s for s in sketches if s.frame.kind == "bias"]
    if not flats or known.zero is None:
        return
    light = max(float(np.median([s.level for s in flats])) - known.zero, 0.0)
    for s in sketches:
        excess = s.level - known.zero
        if s.frame.kind not in ("bias", "dark") or excess <= max(
            known.notable, LIGHT_SHARE * light
        ):
            continue
        # Biases are shared out, so that their own noise is not a pattern in common.
        ours = _mean_pattern([s], less=biases[::2])
        theirs = _mean_pattern(flats, less=biases[1::2])
        power = float(np.mean(theirs * theirs))
        if power == 0.0:
            continue
        share = float(np.mean(ours * theirs)) / power
        doubt = float(np.sqrt(np.mean(ours * ours) / power / ours.size))
        if share > SIGNIFICANT * doubt and 0.5 < share * light / excess < 2.0:
            seen = f"kind contradicted: this {s.frame.kind} holds the pattern of the flats"
            yield Suspicion(s, seen, "correct its kind, or cover the sensor and take it again")


def unlit(sketches: Sequence[Sketch], known: Reference) -> Iterator[Suspicion]:
    """Flats without the light that the others promise, and those out of line."""
    stacks = _stacks(sketches, ("flat",))
    for stack in stacks:
        yield from _lamp_out_of_line(stack, known)
    if known.zero is None:
        return
    signals = [float(np.median([s.level for s in stack])) - known.zero for stack in stacks]
    brightest = max(signals, default=0.0)
    for stack, signal in zip(stacks, signals, strict=True):
        amount = _amount(stack[0])
        rates = [
            other / _amount(fellow[0])
            for fellow, other in zip(stacks, signals, strict=True)
            if other > known.notable and _amount(fellow[0]) > 0
        ]
        expected = float(np.median(rates)) * amount if rates else 0.0
        dark = signal < known.notable
        if dark and brightest < known.notable and amount > 0:
            seen = "kind contradicted: none of the flats holds light"
        elif dark and signal < LEAST_LIGHT * expected and expected > 3 * known.notable:
            seen = (
                f"kind contradicted: this flat holds {signal:.0f} DN of light,"
                f" {expected:.0f} expected"
            )
        else:
            continue
        for s in stack:
            yield Suspicion(s, seen, "check lamp and shutter, take the flats again")


def _lamp_out_of_line(stack: Sequence[Sketch], known: Reference) -> Iterator[Suspicion]:
    zero = known.zero or 0.0
    middle = float(np.median([s.level for s in stack])) - zero
    if middle <= known.notable:
        return
    for s in stack:
        ratio = (s.level - zero) / middle
        if len(stack) >= 3 and not 1 / LAMP_SCATTER < ratio < LAMP_SCATTER:
            seen = f"lamp out of line: holds {ratio:.2g} times the light of its fellow flats"
            yield Suspicion(s, seen, "check lamp and shutter, take the frame again")
    if len(stack) == 2:
        low, high = sorted(s.level - zero for s in stack)
        if high > LAMP_SCATTER * max(low, 0.0):
            seen = f"pair that does not match: {low:.0f} and {high:.0f} DN of light"
            for s in stack:
                yield Suspicion(s, seen, "check lamp and shutter, take the pair again")


def mirrored(sketches: Sequence[Sketch]) -> Iterator[Suspicion]:
    """Frames whose fixed pattern matches their fellows' only when turned over."""
    for kind in ("flat", "dark", "bias"):
        members = [s for s in sketches if s.frame.kind == kind]
        if len(members) < 3:
            continue
        total = np.sum([s.pattern for s in members], axis=0, dtype=np.int32).astype(np.float32)
        for s in members:
            own = s.pattern.astype(np.float32)
            others = total - own
            scale = float(np.sqrt(np.sum(own * own) * np.sum(others * others)))
            if scale == 0.0:
                continue
            straight = float(np.sum(own * others)) / scale
            turned = {
                "left to right": float(np.sum(own[:, ::-1] * others)) / scale,
                "top to bottom": float(np.sum(own[::-1] * others)) / scale,
                "by half a turn": float(np.sum(own[::-1, ::-1] * others)) / scale,
            }
            way = max(turned, key=lambda name: turned[name])
            if turned[way] > max(SIGNIFICANT / np.sqrt(own.size), 2 * abs(straight)):
                seen = f"mirrored against its fellow {kind} frames, {way}"
                yield Suspicion(s, seen, "turn it over, or correct the readout")


def overscan_out_of_line(sketches: Sequence[Sketch], known: Reference) -> Iterator[Suspicion]:
    """Frames whose overscan is far from the others': mirrored, shifted, or another layout."""
    found = [s for s in sketches if not np.isnan(s.overscan)]
    if len(found) < 3:
        return
    middle = float(np.median([s.overscan for s in found]))
    for s in found:
        off = s.overscan - middle
        limit = max(known.notable, OVERSCAN_SHARE * abs(s.highest - s.lowest))
        if abs(off) > limit:
            seen = (
                f"its overscan reads {off:+.0f} DN against the other frames', as if it were"
                " mirrored or laid out in another way"
            )
            yield Suspicion(s, seen, "compare its sections with the recipe's, take it again")


def _stacks(sketches: Sequence[Sketch], kinds: tuple[str, ...]) -> list[list[Sketch]]:
    """Sketches of each stack: those taken alike, by the values that tell stacks apart."""
    stacks: dict[int, list[Sketch]] = {}
    for s in sketches:
        if s.frame.kind in kinds:
            stacks.setdefault(s.stack, []).append(s)
    return list(stacks.values())


def _amount(s: Sketch) -> float:
    """Light in any unit: the stated level, else the exposure, else 1."""
    if s.frame.level is not None:
        return s.frame.level
    return 1.0 if s.frame.exposure is None else s.frame.exposure


def _mean_pattern(sketches: Sequence[Sketch], *, less: Sequence[Sketch]) -> NDArray[np.float32]:
    """Mean pattern [DN] of some frames less that of others."""
    parts = [
        np.mean([s.noise * s.pattern.astype(np.float32) for s in group], axis=0)
        for group in (sketches, less)
        if group
    ]
    pattern: NDArray[np.float32] = parts[0] - parts[1] if len(parts) == 2 else parts[0]
    return pattern
