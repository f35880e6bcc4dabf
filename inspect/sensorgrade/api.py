"""What the Python interface adds to the parts it hands on."""

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

from sensorgrade import stages as table
from sensorgrade.errors import RequestError
from sensorgrade.frames.folder_name import folder_names
from sensorgrade.frames.frame import DeviceFrames, Frame
from sensorgrade.frames.stacks import stacks
from sensorgrade.recipe.library import find_recipe
from sensorgrade.recipe.load import load_recipe as load_with_vocabulary
from sensorgrade.recipe.model import Recipe


def load_recipe(name_or_path: str | Path) -> Recipe:
    """Read a recipe and check all of it; installed stages of other packages may be named in it.

    Parameters
    ----------
    name_or_path : str or Path
        A YAML file, or the name of a ready recipe.

    Raises
    ------
    RequestError
        There is no such file and no ready recipe of that name.
    RecipeError
        The recipe has mistakes; ``problems`` holds a sentence for each.

    Examples
    --------
    >>> import sensorgrade
    >>> recipe = sensorgrade.load_recipe("two-output-ccd")
    >>> recipe.name, [grade.name for grade in recipe.grades]
    ('two-output CCD with overscan', ['science', 'engineering'])
    """
    return load_with_vocabulary(find_recipe(str(name_or_path)), table.vocabulary())


def device_from_frames(
    frames: Sequence[Frame], *, serial: str, recipe: Recipe, lot: str | None = None
) -> DeviceFrames:
    """One device from frames in memory, sorted into stacks as files would be.

    Parameters
    ----------
    frames : sequence of Frame
        From `frame_from_array`, in the order in which they were taken.
    serial : str
        The device's serial number.
    recipe : Recipe
        Its tolerances say which frames are alike.
    lot : str, optional

    Raises
    ------
    RequestError
        There are no frames.

    Examples
    --------
    >>> import numpy as np, sensorgrade
    >>> recipe = sensorgrade.load_recipe("full-frame-ccd")
    >>> frame = sensorgrade.frame_from_array(np.zeros((8, 8), np.uint16), kind="bias")
    >>> device = sensorgrade.device_from_frames([frame] * 3, serial="A1", recipe=recipe)
    >>> [(stack.kind, len(stack.frames)) for stack in device.stacks]
    [('bias', 3)]
    """
    if not frames:
        raise RequestError(f"{serial}: no frames; give those of one device")
    # Reports tell frames apart by what they are called.
    named = [replace(one, label=f"{n:04d} {one.label}") for n, one in enumerate(frames, start=1)]
    found, findings = stacks(named, recipe.frames)
    return DeviceFrames(
        serial=serial,
        folder=folder_names([serial])[serial],
        stacks=found,
        findings=findings,
        lot=lot,
    )
