"""The `steelyard` command: finds the subcommand asked for and imports that one only."""

from __future__ import annotations

import os
import sys
from collections.abc import Sequence
from importlib import import_module
from typing import Any

import typer
from typer.core import TyperCommand, TyperGroup

from steelyard.scripts import terminal

#: one file of this folder each, with a function `command`, and what it is for in one line
COMMANDS = {
    "sets": "List the yield sets there are.",
    "show": "Show a yield set: its paper, its models, its figures.",
    "audit": "Look for what is wrong or odd in a yield set.",
    "admit": "Bring a published table into your library.",
    "library": "List, remove or export admitted sets.",
    "weigh": "Weigh a population: yields by element, source and time.",
    "contrast": "Say how much of an answer is the choice of tables and laws.",
    "leverage": "Tell which models and masses a population's yields rest on.",
    "typeset": "Make a paper's table of yields, with notes and BibTeX.",
    "handoff": "Write yields over metallicity and age for another code.",
    "report": "Make one HTML page that tells all of a population.",
    "scatter": "Draw populations star by star: how far chance goes.",
}

#: those that leave tables or pages of a population, and whether their -o names a folder
RECORDED = {
    "weigh": True,
    "typeset": False,
    "contrast": True,
    "leverage": True,
    "scatter": True,
    "report": True,
}

# typer carries click inside itself, or beside itself in its older versions, and passes on this leaf only
ClickException = next(c for c in typer.BadParameter.__mro__ if c.__name__ == "ClickException")

INTERRUPTED, PIPE_CLOSED, UNUSABLE = 130, 141, 2

SETTINGS = {"help_option_names": ["-h", "--help"], "max_content_width": 100}


def single(name: str) -> Any:
    """Return a command by its name, imported now; outputs of some say how they were made."""
    alone = typer.Typer(add_completion=False, rich_markup_mode=None)
    kind = TyperCommand
    if name in RECORDED:
        from steelyard.scripts.recorded import RecordedCommand as kind
    module = import_module(f"steelyard.scripts.{name}")
    alone.command(name, cls=kind, context_settings=SETTINGS)(module.command)
    return typer.main.get_command(alone)


class Commands(TyperGroup):
    """Subcommands that are imported when they are run, not when they are listed."""

    def list_commands(self, ctx: Any) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: Any, cmd_name: str) -> Any:
        """Return a stand-in that can be listed."""
        return TyperCommand(cmd_name, help=COMMANDS[cmd_name]) if cmd_name in COMMANDS else None

    def resolve_command(self, ctx: Any, args: list[str]) -> Any:
        name = args[0]
        if name not in COMMANDS:
            if ctx.resilient_parsing:  # a shell asks what may follow
                return None, None, args
            from steelyard.yields.errors import InputError, nearest

            raise InputError(f"there is no command {name!r}", mend=nearest(name, COMMANDS))
        return name, single(name), args[1:]

    def main(self, args: Sequence[str] | None = None, standalone_mode: bool = True, **settings: Any) -> Any:
        """Run, and turn whatever ends the run into a status and at most one line."""
        for stream in (sys.stdout, sys.stderr):
            if hasattr(stream, "reconfigure"):
                stream.reconfigure(errors="replace")
        status = self._status(args, settings)
        if standalone_mode:
            sys.exit(status)
        return status

    def invoke(self, ctx: Any) -> Any:
        # inside of typer's own handling, which would answer a closed pipe with status 1
        try:
            status = super().invoke(ctx)
            sys.stdout.flush()
        except BrokenPipeError:
            sys.stdout = open(os.devnull, "w")  # noqa: SIM115 - for what is still flushed at exit
            raise typer.Exit(PIPE_CLOSED) from None
        return status

    def _status(self, args: Sequence[str] | None, settings: dict[str, Any]) -> int:
        try:
            return super().main(args=args, standalone_mode=False, **settings) or 0
        except ClickException as error:
            terminal.complain(_usage(error))
            return UNUSABLE
        except (KeyboardInterrupt, typer.Abort):
            return INTERRUPTED
        except ValueError as error:
            from steelyard.yields.errors import InputError

            if not isinstance(error, InputError):
                raise
            terminal.complain(str(error))
            return UNUSABLE


def _usage(error: Any) -> str:
    """What is wrong with a command line, with the command whose help says more."""
    message = error.format_message()
    message = (message[:1].lower() + message[1:]).rstrip(".")
    if message.endswith("?"):  # it offers the nearest name
        return message
    path = error.ctx.command_path if getattr(error, "ctx", None) else "steelyard"
    return f"{message}; `{path} --help` says what there is"


app = typer.Typer(
    cls=Commands,
    name="steelyard",
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings=SETTINGS,
    no_args_is_help=False,
)


def _version(asked: bool) -> None:
    if asked:
        from importlib.metadata import version

        print(f"steelyard {version('steelyard')}")
        raise typer.Exit


@app.callback(invoke_without_command=True)
def _steelyard(
    ctx: typer.Context,
    version: bool = typer.Option(
        False, "--version", help="Print the version.", callback=_version, is_eager=True
    ),
) -> None:
    """Weigh the published yields of stars by the mass function they are born with.

    \b
    Examples:
      steelyard sets
      steelyard show kobayashi-2006 --metallicity 0.02
      steelyard weigh --output results
      steelyard weigh --help
    """
    if ctx.invoked_subcommand is None:
        print(ctx.get_help())


def main() -> None:
    """Run the command line."""
    app(prog_name="steelyard")
