"""A small vocabulary with every kind of option, so that the reader is tested without stages."""

from dataclasses import dataclass

from sensorgrade.options import choice, entry, number, quantity
from sensorgrade.recipe.model import Section
from sensorgrade.recipe.vocabulary import Vocabulary


@dataclass(frozen=True, slots=True, kw_only=True)
class ReadNoise:
    pairs: int = number("Bias pairs used", default=10, minimum=1)


@dataclass(frozen=True, slots=True, kw_only=True)
class Inner:
    width: int = number("Width in pixels")


@dataclass(frozen=True, slots=True, kw_only=True)
class HotPixels:
    threshold: float = quantity(
        "electron/s", "Dark current above this", default=5.0, minimum=0.0, maximum=1e6
    )
    temperature: float | None = quantity("degC", "At this temperature", default=None)
    warm_up: float = quantity("K", "Allowed drift", default=2.0)
    gain: float = number("Factor", default=1.0, minimum=0.0)
    ratio: float = quantity("", "A bare ratio", default=1.0)
    method: str = choice("How", "mean", "median", default="mean")
    merge: bool = entry("Merge neighbours", default=True)
    label: str | None = entry("Text", default=None)
    steps: tuple[float, ...] = quantity("s", "Exposures", default=())
    span: tuple[int, int] = number("From and to", default=(1, 2))
    area: Section | None = entry("Where", default=None)
    inner: Inner | None = entry("A part of its own", default=None)
    inners: dict[str, Inner] = entry("Parts by name", default_factory=dict)
    words: dict[str, float] = entry("Numbers by name", default_factory=dict)

    def __post_init__(self) -> None:
        if self.gain > self.threshold:
            raise ValueError("gain is above threshold; lower one of them")


VOCABULARY = Vocabulary(
    stages={"read_noise": ReadNoise, "hot_pixels": HotPixels},
    quantities={
        "conversion_gain": "electron/DN",
        "read_noise": "electron",
        "dark_current": "electron/s",
        "dynamic_range": "dB",
        "prnu": "%",
        "cti_serial": "",
    },
    meanings={"read_noise": "Temporal noise in the dark"},
    counts=("hot_pixels", "dead_pixels"),
    sources={
        "read_noise": ("read_noise",),
        "hot_pixels": ("hot_pixels",),
        "dead_pixels": ("flat_pixels", "dark_pixels"),
    },
    thresholds={"hot_pixels": ("threshold",)},
)
