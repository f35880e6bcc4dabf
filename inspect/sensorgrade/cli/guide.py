"""``sensorgrade guide``: the guides that come with the package, on the terminal."""

import click


@click.command(
    epilog="\b\nExamples:\n  sensorgrade guide\n  sensorgrade guide taking-frames\n"
    "  sensorgrade guide writing-limits > writing-limits.md"
)
@click.argument("topic", required=False)
def command(topic: str | None) -> None:
    """Show a guide; without TOPIC, list them.

    The guides are plain Markdown and need no network. Sent to a file or another program they come
    as they are written.
    """
    import sys

    from sensorgrade.guides.topics import guide_text, guide_titles

    if topic is None:
        titles = guide_titles()
        width = max(map(len, titles))
        for name, title in titles.items():
            click.echo(f"{name:{width}}  {title}")
        return
    text = guide_text(topic)
    if not sys.stdout.isatty():
        click.echo(text, nl=False)
        return
    from rich.console import Console
    from rich.markdown import Markdown

    Console().print(Markdown(text))
