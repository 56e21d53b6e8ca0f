"""The one command: gathers the subcommands of training and service.

A subcommand's module is imported when it is run, so that `oddbranch --help` is quick
and a service never loads what only learning needs. The command of a module that is not
installed does not appear.
"""

from __future__ import annotations

import difflib
import errno
import gc
import importlib
import importlib.util
import sys
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import NoReturn

import click

from scoring.errors import OddbranchError

# name: (module, attribute, one line of help)
COMMANDS = {
    "survey": ("training.survey", "survey_command", "Propose a channel table from history."),
    "learn": ("training.learn", "learn_command", "Learn a model from history."),
    "score": ("training.score", "score_command", "Score records in a file."),
    "replay": ("training.replay", "replay_command", "Run records through a model, as if live."),
    "drill": ("training.drill", "drill_command", "Find out which faults a model would catch."),
    "serve": ("service.serve", "serve_command", "Score records over HTTP."),
    "token": ("service.access", "token_command", "Make and revoke access tokens."),
    "export": ("service.export", "export_command", "Write stored records as CSV."),
    "nightly": ("training.nightly", "nightly_command", "Renew the model from stored records."),
    "models": ("training.models", "models_command", "List, compare and choose kept models."),
    "settings": ("oddbranch", "settings_command", "Show what the settings are, and why."),
    "demo": ("training.demo", "demo_command", "See it all on an invented plant."),
}

# What `oddbranch settings` can show: (module, function that yields its lines).
SETTINGS = {
    "service": ("service.settings", "lines_in_force"),
    "learn": ("training.settings_shown", "learn_lines"),
    "nightly": ("training.settings_shown", "nightly_lines"),
}

# What the machine refuses and its owner can mend: a full or read-only disk, a missing right.
ENVIRONMENT_ERRORS = (errno.ENOSPC, errno.EDQUOT, errno.EROFS, errno.EACCES)

ADVICE = (
    "What oddbranch says is advice: it is no protective function and replaces no alarm, trip "
    "or interlock; local codes and licensed practice decide."
)


def _is_there(module: str) -> bool:
    try:
        return importlib.util.find_spec(module) is not None
    except ModuleNotFoundError:
        return False


class LazyGroup(click.Group):
    """A group whose commands are imported when they are run."""

    def list_commands(self, ctx: click.Context) -> list[str]:  # noqa: ARG002 - click's signature
        """Return the names of the commands that are there, in the order of the work."""
        return [name for name, (module, _, _) in COMMANDS.items() if _is_there(module)]

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        """Return one command, imported now; None for a name that is not known."""
        if cmd_name not in self.list_commands(ctx):
            return None
        module, attribute, _ = COMMANDS[cmd_name]
        # What is imported stays; to look for garbage in it takes a tenth of the time.
        was_on = gc.isenabled()
        gc.disable()
        try:
            command = getattr(importlib.import_module(module), attribute)
        finally:
            if was_on:
                gc.enable()
        assert isinstance(command, click.Command)
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """Write the list of commands without importing any."""
        with formatter.section("Commands"):
            formatter.write_dl([(name, COMMANDS[name][2]) for name in self.list_commands(ctx)])

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        """Find the command that the arguments name; a near miss gets a suggestion."""
        name = args[0] if args else ""
        names = self.list_commands(ctx)
        if name and not name.startswith("-") and name not in names:
            near = difflib.get_close_matches(name, names, n=1)
            hint = f"did you mean {near[0]!r}?" if near else f"there are {', '.join(names)}"
            ctx.fail(f"no command {name!r}; {hint}")
        return super().resolve_command(ctx, args)


def _version() -> str:
    try:
        return version("oddbranch")
    except PackageNotFoundError:
        return "unknown (not installed)"


@click.group(
    cls=LazyGroup,
    context_settings={"help_option_names": ["-h", "--help"]},
    epilog=ADVICE,
    no_args_is_help=True,
)
@click.version_option(_version(), prog_name="oddbranch", message="%(prog)s %(version)s")
def cli() -> None:
    """Learn what goes with what in a fleet's sensor history, and score every record by it."""


@click.command("settings")
@click.argument("of", type=click.Choice(tuple(SETTINGS)), default="service")
@click.option(
    "--config",
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="Settings file, as given there.",
)
def settings_command(of: str, config: Path | None) -> None:
    """Show every setting in force of the service, of learning or of the nightly job.

    Each line says where the value is from: an environment variable wins over the file, that
    over the default; options of `serve` win over all. Passwords are not shown.
    """
    module, function = SETTINGS[of]
    for line in getattr(importlib.import_module(module), function)(config):
        click.echo(line)


def main() -> NoReturn:
    """Run the command and end the process: 0 done, 1 refused with the reason, 2 usage."""
    try:
        cli.main(prog_name="oddbranch")
    except OddbranchError as error:
        click.echo(f"oddbranch: {error}", err=True)
        sys.exit(error.exit_code)
    except OSError as error:
        if error.errno not in ENVIRONMENT_ERRORS:
            raise
        place = error.filename or "writing"
        click.echo(f"oddbranch: {place}: {error.strerror}", err=True)
        sys.exit(1)


if __name__ == "__main__":
    main()
