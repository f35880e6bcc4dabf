"""Small recipes and readings that the grading tests start from."""

from sensorgrade.defects.defect import DefectCount
from sensorgrade.measurement import Measurement
from sensorgrade.recipe.model import (
    DecisionRule,
    FrameRules,
    Grade,
    Limit,
    OutputOptions,
    Recipe,
    Sensor,
)


def limit(name, relation, bound, unit="electron", **narrowing):
    return Limit(name, relation, bound, unit, 1, **narrowing)


def recipe(*grades, rule="simple", confidence=95.0, outputs=(), colour="none"):
    sensor = Sensor(
        technology="ccd",
        pixel_pitch=15.0,
        outputs={name: OutputOptions() for name in outputs},
        colour=colour,
    )
    return Recipe(
        name="test",
        sensor=sensor,
        frames=FrameRules(),
        stages={},
        zones={},
        decision=DecisionRule(kind=rule, confidence=confidence),
        grades=tuple(Grade(name, tuple(limits)) for name, limits in grades),
        path="recipe.yaml",
        text="",
        sha256="",
    )


def measured(name, value, doubt, *, scope="device", unit="electron", n=100):
    return Measurement(name, scope, value, doubt, unit, n)


def counted(kind, found, expected=None, doubt=0.0, *, scope="device"):
    return DefectCount(kind, scope, found, found if expected is None else expected, doubt)
