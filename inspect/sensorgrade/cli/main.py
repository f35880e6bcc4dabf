"""The entry point: a group whose commands are imported only when they are called."""

import importlib
import sys
from typing import Any

import click

from sensorgrade import __version__
from sensorgrade.errors import DeviceError, FrameError, RecipeError, SensorgradeError

# name: module of cli/ whose ``command`` is the click command
COMMANDS = {
    "demo": "demo",
    "inspect": "inspect_",
    "check": "check",
    "grade": "grade",
    "plan": "plan",
    "compare": "compare",
    "mask": "mask",
    "simulate": "simulate",
    "lot": "lot",
    "recipes": "recipes",
    "guide": "guide",
}

WRONG_REQUEST = 2
NOT_INSPECTED = 3


class LazyGroup(click.Group):
    """Finds a command's module by name, so that ``--help`` starts without numba or astropy."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """All command names in the order of the table."""
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        """Import the module of that command."""
        if cmd_name not in COMMANDS:
            return None
        command: click.Command = importlib.import_module(
            f"sensorgrade.cli.{COMMANDS[cmd_name]}"
        ).command
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """List the commands with their first sentence, from the table below."""
        with formatter.section("Commands"):
            formatter.write_dl([(name, SUMMARIES[name]) for name in COMMANDS])


SUMMARIES = {
    "demo": "Make a small lot of simulated devices and inspect it, end to end.",
    "inspect": "Inspect devices from raw frames: grades, masks and pages.",
    "check": "Say which frames are there and what is wrong or missing.",
    "grade": "Grade stored measurements again, against other limits.",
    "plan": "Say how many frames each limit needs to be decided.",
    "compare": "Compare two runs of the same devices, before and after.",
    "mask": "Crop, bin, flip, merge, compare and export defect masks.",
    "simulate": "Write frames of a simulated sensor, with the truth.",
    "lot": "Show and export what a run's ledger holds.",
    "recipes": "List, show and validate recipes; write their JSON Schema.",
    "guide": "Show the guides.",
}


@click.group(
    cls=LazyGroup,
    context_settings={"help_option_names": ["-h", "--help"]},
    epilog="Exit status: 0 every device accepted; 1 some rejected or undecided; 2 the request is"
    " wrong; 3 some device could not be inspected.",
)
@click.version_option(__version__, prog_name="sensorgrade")
def command() -> None:
    """Inspect image sensors from raw bench frames, and grade them."""


def main(arguments: list[str] | None = None) -> Any:
    """Run the command line; a user's mistake becomes one message and an exit status."""
    try:
        return command.main(args=arguments, prog_name="sensorgrade")
    except (DeviceError, FrameError) as error:
        click.echo(f"sensorgrade: {error}", err=True)
        sys.exit(NOT_INSPECTED)
    except SensorgradeError as error:
        click.echo(f"sensorgrade: {error}", err=True)
        if isinstance(error, RecipeError) and len(error.problems) > 1:
            click.echo(f"{len(error.problems)} mistakes; nothing was done", err=True)
        sys.exit(WRONG_REQUEST)
    except OSError as error:  # a full disk, a folder without permission
        from sensorgrade.recipe.document import printable

        where = f"{printable(str(error.filename), 4096)}: " if error.filename else ""
        why = error.strerror or str(error)
        click.echo(f"sensorgrade: {where}{why}; look at the disk and its permissions", err=True)
        sys.exit(WRONG_REQUEST)
