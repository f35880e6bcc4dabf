"""The guides that come with the package, found by topic."""

from pathlib import Path

from sensorgrade.errors import RequestError
from sensorgrade.recipe.declared import nearest

FOLDER = Path(__file__).parent

# In the order a new user needs them.
TOPICS = (
    "taking-frames",
    "writing-limits",
    "reading-a-report",
    "measurements",
    "masks-in-reduction",
    "lots-and-clusters",
    "python-interface",
    "adding-a-stage",
)


def guide_text(topic: str) -> str:
    """The guide's Markdown.

    Raises
    ------
    RequestError
        No guide on that topic; the message names the nearest.
    """
    if topic not in TOPICS:
        raise RequestError(f"guide: there is none on {topic!r}{nearest(topic, TOPICS)}")
    return (FOLDER / f"{topic}.md").read_text(encoding="utf-8")


def guide_titles() -> dict[str, str]:
    """Title of each guide by its topic."""
    return {topic: guide_text(topic).splitlines()[0].removeprefix("# ") for topic in TOPICS}
