"""Fields of option dataclasses: what a recipe may say, with unit, range and meaning.

A stage declares its recipe keys once, as a frozen dataclass whose fields are made here.
The recipe reader, the JSON Schema and the guides are all derived from these declarations.
"""

from dataclasses import MISSING, dataclass, field
from typing import Any


@dataclass(frozen=True, slots=True)
class Declared:
    """What is known of one recipe key; stored as the field's metadata under ``"declared"``.

    ``unit`` is an astropy unit string when the key takes a quantity such as ``"15 um"``; the
    field then holds a plain float in that unit. ``choices`` lists the allowed words.
    """

    help: str
    unit: str | None = None
    minimum: float | None = None
    maximum: float | None = None
    choices: tuple[str, ...] | None = None


def quantity(
    unit: str,
    help: str,
    *,
    default: Any = MISSING,
    minimum: float | None = None,
    maximum: float | None = None,
) -> Any:
    """A field holding a float in ``unit``, written in the recipe as a string with a unit.

    Without ``default`` the key is required; ``default=None`` makes it optional.
    """
    return field(
        default=default,
        metadata={"declared": Declared(help, unit=unit, minimum=minimum, maximum=maximum)},
    )


def number(
    help: str,
    *,
    default: Any = MISSING,
    minimum: float | None = None,
    maximum: float | None = None,
) -> Any:
    """A field holding an int or float (by its annotation), written as a bare number."""
    return field(
        default=default, metadata={"declared": Declared(help, minimum=minimum, maximum=maximum)}
    )


def choice(help: str, *choices: str, default: Any = MISSING) -> Any:
    """A field holding one of ``choices``."""
    return field(default=default, metadata={"declared": Declared(help, choices=choices)})


def entry(help: str, *, default: Any = MISSING, default_factory: Any = MISSING) -> Any:
    """A field of any other annotated type: text, flag, nested dataclass, tuple of them."""
    metadata = {"declared": Declared(help)}
    if default_factory is not MISSING:
        return field(default_factory=default_factory, metadata=metadata)
    return field(default=default, metadata=metadata)
