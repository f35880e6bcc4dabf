"""A number with its doubt, and a remark of the audit: what every stage hands on."""

from dataclasses import dataclass
from typing import Literal


@dataclass(frozen=True, slots=True)
class Measurement:
    """One measured quantity of a device or of a part of it.

    ``scope`` says which part: ``"device"``, or a comma-joined list such as
    ``"output left"``, ``"output left, colour red"``, ``"output left, 550 nm"``.
    ``unit`` is an astropy unit string ("electron", "electron / s", "%", "dB", "DN", or "").
    ``n`` is the number of independent samples behind the value.
    """

    name: str
    scope: str
    value: float
    standard_uncertainty: float
    unit: str
    n: int


@dataclass(frozen=True, slots=True)
class Finding:
    """Something the audit noticed about the frames, or a stage that could not run.

    ``where`` is a file name, a stack or a stage. ``undecides`` lists the measurement names
    whose limits can no longer be decided because of it.
    """

    severity: Literal["note", "warning", "error"]
    where: str
    seen: str
    remedy: str
    undecides: tuple[str, ...] = ()
