"""What a recipe may name: the stages there are, and what limits can be set on."""

from dataclasses import dataclass, field


@dataclass(frozen=True, slots=True)
class Vocabulary:
    """Assembled from the stage table, so that the recipe reader need not know the stages.

    ``stages`` maps a stage's name to its options class. ``quantities`` maps a measurement's
    name to its unit ("electron", "%", ...) and ``meanings`` to a sentence. ``counts`` are the
    names of countable defects (hot_pixels, ...), without unit. ``sources`` maps each name that
    limits can be set on to the stages that yield it: at least one of them must be in a recipe
    that sets such a limit. ``thresholds`` names the options of stages that can move without
    frames, from what inspections keep.
    """

    stages: dict[str, type]
    quantities: dict[str, str]
    meanings: dict[str, str]
    counts: tuple[str, ...]
    sources: dict[str, tuple[str, ...]]
    thresholds: dict[str, tuple[str, ...]] = field(default_factory=dict)
