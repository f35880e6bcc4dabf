"""A recipe file, read whole and judged whole before any frame is."""

import hashlib
import re
from dataclasses import replace
from pathlib import Path
from typing import Any, TypeVar

from sensorgrade.errors import RecipeError
from sensorgrade.options import Declared
from sensorgrade.recipe.declared import alternatives, nearest, options, value
from sensorgrade.recipe.document import LONGEST, Mapping, Problems, Scalar, document, joined, shown
from sensorgrade.recipe.limits import Context, context, grades
from sensorgrade.recipe.model import DecisionRule, FrameRules, Grade, LotPlan, Recipe, Sensor, Zone
from sensorgrade.recipe.pattern import endless
from sensorgrade.recipe.vocabulary import Vocabulary

Options = TypeVar("Options")

# Top-level keys with what they hold, in the order of a recipe.
TOP = {
    "name": "What the recipe is for, shown on every page",
    "sensor": "The device as its maker describes it",
    "frames": "How to tell what each file is; omit when the headers use the usual keywords",
    "stages": "What is measured, each stage with its options; a stage left out does not run",
    "zones": "Named parts of the image that limits may refer to",
    "lot": "How the lot as a whole is accepted by a sample of its devices",
    "decision": "When a reading with its doubt counts as within a limit",
    "grades": "Limits for each grade, best first; a device takes the first whose limits it meets",
}
REQUIRED = ("name", "sensor")
LIMIT_KEYS = ("grades", "decision", "lot", "stages")
WORDS = ("bias", "dark", "flat", "x-ray", "pump", "ignore")  # what frames.kinds translates into
NAME = re.compile(r"[^\W_][\w .+-]{0,30}")  # outputs and zones: no comma, they join scopes


def load_recipe(path: Path, vocabulary: Vocabulary) -> Recipe:
    """Read and check the recipe at ``path``.

    Raises
    ------
    RecipeError
        The file cannot be read as text, or the recipe has mistakes: all of them, a line each.
    """
    return parse_recipe(_text(path), vocabulary, path=str(path))


def load_options(path: Path, cls: type[Options]) -> Options:
    """Any other YAML file whose keys are the fields of one options class, such as a sensor model.

    Raises
    ------
    RecipeError
        As `load_recipe`.
    """
    problems = Problems(str(path))
    root = document(_text(path), problems)
    read: Options = options(cls, root, root.line, "", problems)
    if len(problems):
        raise problems.error()
    return read


def _text(path: Path) -> str:
    """The file's text, if it is one of a size that a person writes."""
    if not path.is_file():
        what = "this is a folder" if path.is_dir() else "no such file"
        raise RecipeError((f"{path}: {what}; expected a YAML file",))
    try:
        with path.open("rb") as stream:
            content = stream.read(LONGEST + 1)
    except OSError as error:
        raise RecipeError((f"{path}: cannot be read ({error.strerror})",)) from error
    if len(content) > LONGEST:
        raise RecipeError((f"{path}: larger than 1 MiB; a recipe is a few pages at most",))
    try:
        return content.decode("utf-8")
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        raise RecipeError((f"{path}:{line}  not UTF-8 text; save the file as UTF-8",)) from error


def parse_recipe(text: str, vocabulary: Vocabulary, *, path: str) -> Recipe:
    """Check a recipe's text and turn it into plain numbers.

    ``path`` is what messages call the recipe.

    Raises
    ------
    RecipeError
        ``problems`` has one sentence for each mistake, in the order of lines.
    """
    problems = Problems(path)
    root = document(text, problems)
    if not isinstance(root, Mapping):
        problems.add(
            root.line, "", f"expected keys such as name, sensor and grades, found {shown(root)}"
        )
        raise problems.error()
    for name, entry in root.entries.items():
        if name not in TOP:
            problems.add(entry.line, joined("", name), f"no such key{nearest(name, TOP)}")
    for name in REQUIRED:
        if name not in root.entries:
            problems.add(root.line, "", f"{name} is missing ({TOP[name]})")
    name = _name(root, problems)
    sensor = _part(root, "sensor", Sensor, problems)
    frames = _part(root, "frames", FrameRules, problems)
    decision = _part(root, "decision", DecisionRule, problems)
    lot = _part(root, "lot", LotPlan, problems)
    stages = _stages(root, vocabulary, problems)
    zones = _zones(root, problems)
    if sensor is not None:
        _names(sensor.outputs, _mapping(root, "sensor", "outputs"), "sensor.outputs", problems)
    if frames is not None:
        _frame_rules(frames, root, problems)
    limits = context(vocabulary, frozenset(stages), sensor, zones)
    graded = _grades(root, limits, problems)
    if len(problems):
        raise problems.error()
    return Recipe(
        name=name,
        sensor=sensor,
        frames=frames,
        stages={stage: stages[stage] for stage in vocabulary.stages if stage in stages},
        zones=zones,
        decision=decision,
        grades=graded,
        path=path,
        text=text,
        sha256=hashlib.sha256(text.encode("utf-8")).hexdigest(),
        lot=lot,
    )


def load_limits(path: Path, vocabulary: Vocabulary, *, recipe: Recipe) -> Recipe:
    """``recipe`` with the grades of another file: a whole recipe, or one of limits alone.

    A file of limits alone has the keys grades, decision, lot and stages, the last with nothing
    but thresholds that can move without frames; what it leaves out stays as it is in ``recipe``,
    whose sensor, zones and stages the limits refer to.

    Raises
    ------
    RecipeError
        As `load_recipe`.
    """
    return parse_limits(_text(path), vocabulary, recipe=recipe, path=str(path))


def parse_limits(text: str, vocabulary: Vocabulary, *, recipe: Recipe, path: str) -> Recipe:
    """As `load_limits`, from a text that messages call ``path``."""
    problems = Problems(path)
    root = document(text, problems)
    if not isinstance(root, Mapping) or "sensor" in root.entries:
        return parse_recipe(text, vocabulary, path=path)
    for name, entry in root.entries.items():
        if name not in LIMIT_KEYS:
            problems.add(
                entry.line,
                joined("", name),
                f"a file of limits holds {alternatives(LIMIT_KEYS)}; a whole recipe starts with"
                " name and sensor",
            )
    if "grades" not in root.entries and "stages" not in root.entries:
        problems.add(root.line, "", f"grades is missing ({TOP['grades']})")
    stages = _moved(root, vocabulary, recipe, problems)
    graded = _grades(
        root, context(vocabulary, frozenset(recipe.stages), recipe.sensor, recipe.zones), problems
    )
    decision = _part(root, "decision", DecisionRule, problems)
    lot = _part(root, "lot", LotPlan, problems)
    if len(problems):
        raise problems.error()
    return replace(
        recipe,
        stages=stages,
        grades=graded if "grades" in root.entries else recipe.grades,
        decision=decision if "decision" in root.entries else recipe.decision,
        lot=lot if "lot" in root.entries else recipe.lot,
        path=path,
        text=text,
        sha256=hashlib.sha256(text.encode("utf-8")).hexdigest(),
    )


def _grades(root: Mapping, limits: Context, problems: Problems) -> tuple[Grade, ...]:
    if "grades" not in root.entries:
        return ()
    entry = root.entries["grades"]
    return grades(entry.value, limits, entry.line, problems)


def _name(root: Mapping, problems: Problems) -> str:
    if "name" not in root.entries:
        return ""
    entry = root.entries["name"]
    if isinstance(entry.value, Scalar) and entry.value.empty:
        problems.add(entry.line, "name", "expected text, found nothing")
        return ""
    return value(entry.value, str, Declared(TOP["name"]), "name", problems) or ""


def _part(root: Mapping, name: str, cls: type, problems: Problems) -> Any:
    """A top-level part by its options class; all defaults where the recipe has no such key."""
    if name not in root.entries:
        return None if name in REQUIRED else cls()
    entry = root.entries[name]
    return options(cls, entry.value, entry.line, name, problems)


def _mapping(root: Mapping, *names: str) -> Mapping:
    """The mapping below these keys, empty where there is none."""
    node: Any = root
    for name in names:
        entry = node.entries.get(name)
        if entry is None or not isinstance(entry.value, Mapping):
            return Mapping({}, root.line)
        node = entry.value
    assert isinstance(node, Mapping)
    return node


def _stages(root: Mapping, vocabulary: Vocabulary, problems: Problems) -> dict[str, Any]:
    if "stages" not in root.entries:
        return {}
    entry = root.entries["stages"]
    if not isinstance(entry.value, Mapping):
        if not (isinstance(entry.value, Scalar) and entry.value.empty):
            found = shown(entry.value)
            problems.add(entry.value.line, "stages", f"expected stages with options, found {found}")
        return {}
    read = {}
    for name, stage in entry.value.entries.items():
        where = joined("stages", name)
        if name not in vocabulary.stages:
            hint = nearest(name, vocabulary.stages)
            if name in vocabulary.sources:
                hint = f"; {name} comes from {alternatives(vocabulary.sources[name])}"
            problems.add(stage.line, where, f"no such stage{hint}")
            continue
        read[name] = options(vocabulary.stages[name], stage.value, stage.line, where, problems)
    return read


def _moved(
    root: Mapping, vocabulary: Vocabulary, recipe: Recipe, problems: Problems
) -> dict[str, Any]:
    """The recipe's stages with the thresholds that a file of limits moves."""
    moved = dict(recipe.stages)
    written = _mapping(root, "stages")
    for name, read in _stages(root, vocabulary, problems).items():
        line, where = written.entries[name].line, joined("stages", name)
        movable = vocabulary.thresholds.get(name, ())
        if name not in recipe.stages:
            problems.add(line, where, "was not inspected; only frames can tell, inspect again")
            continue
        keys = {
            key: entry
            for key, entry in _mapping(written, name).entries.items()
            if hasattr(recipe.stages[name], key)
            and not (isinstance(entry.value, Scalar) and entry.value.empty)
        }
        for key, entry in keys.items():
            if key not in movable:
                can = f"; without them {alternatives(movable)} can move" if movable else ""
                sentence = f"needs the frames, inspect again{can}"
                problems.add(entry.line, joined(where, key), sentence)
        if read is not None:
            given = {key: getattr(read, key) for key in keys if key in movable}
            moved[name] = replace(recipe.stages[name], **given)
    return moved


def _zones(root: Mapping, problems: Problems) -> dict[str, Zone]:
    if "zones" not in root.entries:
        return {}
    node = root.entries["zones"].value
    read: dict[str, Zone] = (
        value(node, dict[str, Zone], Declared(TOP["zones"]), "zones", problems) or {}
    )
    written = _mapping(root, "zones")
    _names(read, written, "zones", problems)
    for name, zone in read.items():
        if zone is None:
            continue
        line = written.entries[name].line
        shapes = ("rectangle", "circle", "ring", "border")
        given = [shape for shape in shapes if getattr(zone, shape) is not None]
        if len(given) != 1:
            found = " and ".join(given) or "none"
            problems.add(
                line, joined("zones", name), f"expected one of {', '.join(shapes)}, found {found}"
            )
        if zone.circle is not None and zone.circle[2] <= 0:
            problems.add(line, joined("zones", name), "expected a circle's radius above 0")
        if zone.ring is not None and not 0 <= zone.ring[2] < zone.ring[3]:
            problems.add(
                line, joined("zones", name), "expected a ring's inner radius below its outer one"
            )
    return read


def _names(named: dict[str, Any], written: Mapping, where: str, problems: Problems) -> None:
    """Note names that could not stand in a scope, a table or a page."""
    for name in named:
        if NAME.fullmatch(name) is None:
            problems.add(
                written.entries[name].line,
                joined(where, name),
                "expected a name of 1 to 31 letters, digits, spaces, '.', '+', '-' or '_' that"
                " starts with a letter or digit",
            )


def _frame_rules(frames: FrameRules, root: Mapping, problems: Problems) -> None:
    """Note what frame rules lack or what contradicts."""
    written = _mapping(root, "frames")
    line = root.entries["frames"].line if "frames" in root.entries else root.line
    if frames.sorted_by == "manifest" and frames.manifest is None:
        problems.add(
            line, "frames", "sorted_by: manifest needs 'manifest', the name of the CSV file"
        )
    if frames.sorted_by == "name" and frames.pattern is None:
        problems.add(
            line, "frames", "sorted_by: name needs 'pattern', a regular expression with groups"
        )
    if frames.pattern is not None:
        entry = written.entries["pattern"]
        try:
            groups = re.compile(frames.pattern).groupindex
        except (re.error, OverflowError, RecursionError) as error:
            problems.add(entry.line, "frames.pattern", f"not a regular expression: {error}")
        else:
            if (reason := endless(frames.pattern)) is not None:
                problems.add(entry.line, "frames.pattern", reason)
            if not groups:
                problems.add(
                    entry.line,
                    "frames.pattern",
                    "expected named groups, such as (?P<kind>bias|dark|flat); found none",
                )
    kinds = _mapping(root, "frames", "kinds")
    for word, kind in frames.kinds.items():
        if kind not in WORDS:
            problems.add(
                kinds.entries[word].line,
                joined("frames.kinds", word),
                f'expected {alternatives(WORDS)}, found "{kind}"{nearest(kind, WORDS)}',
            )


def recipe_title(path: Path) -> str:
    """The recipe's own name, without judging the rest of it; empty if it has none."""
    root = document(path.read_text(encoding="utf-8"), Problems(str(path)))
    if isinstance(root, Mapping) and "name" in root.entries:
        title = root.entries["name"].value
        return title.text if isinstance(title, Scalar) else ""
    return ""
