"""A page's data and its template: every field tells in a sentence what the template may expect."""

import base64
import hashlib
from dataclasses import field, fields
from functools import cache
from importlib.resources import files
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

CAUTION = (
    "A grade supports the judgement of the engineer and the terms of the contract; it never"
    " replaces them. It is not a release for safety-critical use on its own. Work with X-ray"
    " sources, cryogens, lasers and high voltage follows local rules and needs licensed practice."
)


def told(sentence: str) -> Any:
    """A field of a page's dataclass, with the sentence that says what it holds."""
    return field(metadata={"sentence": sentence})


def rendered(template: str, page: Any) -> str:
    """The page's fields, no more and no less, put into its template; all text is escaped."""
    context = {one.name: getattr(page, one.name) for one in fields(page)}
    return environment().get_template(template).render(context)


@cache
def environment() -> Environment:
    """Templates of this package, with escaping on and unknown names refused."""
    return Environment(
        loader=PackageLoader("sensorgrade.report", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )


@cache
def static_text(*names: str) -> Markup:
    """Style sheets or scripts of this package, one after the other, to stand in a page."""
    folder = files("sensorgrade.report") / "static"
    return Markup("".join((folder / name).read_text(encoding="utf-8") for name in names))


@cache
def policy(script: Markup) -> str:
    """Content security policy: nothing from anywhere, and no script but this one."""
    digest = hashlib.sha256(script.encode()).digest()
    return (
        "default-src 'none'; img-src data:; style-src 'unsafe-inline';"
        f" script-src 'sha256-{base64.b64encode(digest).decode()}'"
    )
