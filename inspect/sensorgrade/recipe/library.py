"""The ready recipes that come with the package, found by name."""

from pathlib import Path

import sensorgrade
from sensorgrade.errors import RequestError
from sensorgrade.recipe.declared import nearest


def recipe_folder() -> Path:
    """The folder of ready recipes: in the installed package, or in the repository it runs from."""
    package = Path(sensorgrade.__file__).parent
    installed = package / "recipes"
    return installed if installed.is_dir() else package.parents[1] / "recipes"


def recipe_names() -> tuple[str, ...]:
    """Names of the ready recipes, sorted."""
    return tuple(sorted(path.stem for path in recipe_folder().glob("*.yaml")))


def find_recipe(name_or_path: str) -> Path:
    """The file that a user means: a path to a recipe, or the name of a ready one.

    Raises
    ------
    RequestError
        Neither; the message lists the ready recipes.
    """
    if name_or_path in recipe_names():
        return recipe_folder() / f"{name_or_path}.yaml"
    path = Path(name_or_path)
    if path.exists():
        return path
    if path.suffix in (".yaml", ".yml") or len(path.parts) > 1:
        raise RequestError(f"{name_or_path}: no such recipe file")
    raise RequestError(
        f"{name_or_path}: no such recipe file, and no ready recipe of that name"
        f"{nearest(name_or_path, recipe_names())}"
    )
