"""``sensorgrade recipes``: what recipes there are, whether one is right, and their schema."""

import json
from pathlib import Path

import click


@click.group(
    epilog="\b\nExamples:\n"
    "  sensorgrade recipes list\n"
    "  sensorgrade recipes show two-output-ccd > mine.yaml\n"
    "  sensorgrade recipes validate mine.yaml\n"
    "  sensorgrade recipes draft frames/ --out mine.yaml"
)
def command() -> None:
    """List, show, draft and validate recipes; write their JSON Schema.

    A recipe is a YAML file that states the device, its frames, what is measured and the limits of
    each grade. Ready ones come with the program: copy the nearest and change it.
    """


@command.command("list", epilog="\b\nExample:\n  sensorgrade recipes list")
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of text.")
def list_(as_json: bool) -> None:
    """List the ready recipes and their titles."""
    from sensorgrade.recipe.library import recipe_folder, recipe_names
    from sensorgrade.recipe.load import recipe_title

    titles = {name: recipe_title(recipe_folder() / f"{name}.yaml") for name in recipe_names()}
    if as_json:
        click.echo(json.dumps([{"recipe": name, "name": title} for name, title in titles.items()]))
        return
    width = max(map(len, titles), default=0)
    for name, title in titles.items():
        click.echo(f"{name:{width}}  {title}")


@command.command(epilog="\b\nExample:\n  sensorgrade recipes show two-output-ccd > mine.yaml")
@click.argument("name")
def show(name: str) -> None:
    """Print the recipe NAME as it stands, comments and all."""
    from sensorgrade.recipe.library import find_recipe

    click.echo(find_recipe(name).read_text(encoding="utf-8"), nl=False)


@command.command(epilog="\b\nExample:\n  sensorgrade recipes validate mine.yaml")
@click.argument("files", nargs=-1, required=True, metavar="RECIPE...")
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of text.")
@click.option("--quiet", is_flag=True, help="Print nothing when all is well.")
def validate(files: tuple[str, ...], as_json: bool, quiet: bool) -> None:
    """Check recipes: every mistake at once.

    No frames are needed. RECIPE is a file or the name of a ready recipe. Exit status 0 when all
    are right, 2 when one is not.
    """
    from sensorgrade.errors import RecipeError, RequestError
    from sensorgrade.recipe.library import find_recipe
    from sensorgrade.recipe.load import load_recipe
    from sensorgrade.stages import vocabulary

    words = vocabulary()
    mistakes: list[str] = []
    report = []
    for file in files:
        try:
            recipe = load_recipe(find_recipe(file), words)
        except RequestError as error:
            problems = error.problems if isinstance(error, RecipeError) else (str(error),)
            mistakes += problems
            report.append({"recipe": file, "valid": False, "problems": list(problems)})
            continue
        report.append({"recipe": file, "valid": True, "problems": []})
        if not quiet and not as_json:
            limits = sum(len(grade.limits) for grade in recipe.grades)
            click.echo(
                f"{file}: right; {len(recipe.stages)} stages, {len(recipe.grades)} grades,"
                f" {limits} limits"
            )
    if as_json:
        click.echo(json.dumps(report, indent=2))
        if mistakes:
            raise click.exceptions.Exit(2)
    elif mistakes:
        raise RecipeError(tuple(mistakes))


@command.command(epilog="\b\nExample:\n  sensorgrade recipes schema --out recipe-schema.json")
@click.option(
    "--out",
    type=click.Path(dir_okay=False, path_type=Path),
    help="Write to this file instead of printing.",
)
def schema(out: Path | None) -> None:
    """Write the JSON Schema of recipes, for editors."""
    from sensorgrade.recipe.schema import json_schema
    from sensorgrade.stages import vocabulary

    text = json.dumps(json_schema(vocabulary()), indent=2, ensure_ascii=False) + "\n"
    if out is None:
        click.echo(text, nl=False)
    else:
        out.write_text(text, encoding="utf-8")
        click.echo(f"wrote {out}", err=True)


@command.command(epilog="\b\nExample:\n  sensorgrade recipes draft frames/ --out mine.yaml")
@click.argument("folder", type=click.Path(path_type=Path))
@click.option(
    "--out",
    type=click.Path(dir_okay=False, path_type=Path),
    help="Write to this new file instead of printing.",
)
def draft(folder: Path, out: Path | None) -> None:
    """Write a first recipe for a FOLDER of frames.

    Header keywords, kinds, shapes, outputs and overscan are guessed from the frames; a comment on
    each guess says where it comes from and what to check. The draft sets no limits.
    """
    from sensorgrade.errors import RequestError
    from sensorgrade.frames.draft import drafted_recipe
    from sensorgrade.stages import vocabulary

    if out is not None and out.exists():
        raise RequestError(f"{out}: exists already; name a new file or remove it")
    text = drafted_recipe(folder, stages=tuple(vocabulary().stages))
    if out is None:
        click.echo(text, nl=False)
    else:
        out.write_text(text, encoding="utf-8")
        click.echo(f"wrote {out}; now check each guess in it", err=True)
