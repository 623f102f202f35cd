"""The command line: one table of commands, each imported only when it is called."""

from __future__ import annotations

import sys
import tempfile
import traceback
from collections.abc import Sequence
from importlib import import_module
from importlib.metadata import PackageNotFoundError, version

import click

__all__ = ["cli", "main"]

#: name: (module, attribute, one line for the list of commands). Importing them all would cost a second.
COMMANDS: dict[str, tuple[str, str, str]] = {
    "demo": ("modesieve.io.commands.demo", "demo", "Build a model, shrink it, say how wrong the small one is."),
    "inspect": ("modesieve.io.commands.inspect", "inspect", "Say what a file holds and whether it can be used."),
    "brief": ("modesieve.io.commands.brief", "brief", "Print a brief for a model, ready to edit and run."),
    "run": ("modesieve.io.commands.run", "run", "Do the whole job that a brief describes."),
    "modes": ("modesieve.io.commands.modes", "modes", "Compute, count and rank the modes of a model."),
    "truncate": ("modesieve.io.commands.truncate", "truncate", "Keep the modes that matter and write the small model."),
    "compare": ("modesieve.io.commands.compare", "compare", "Hold small models against the full one."),
    "export": (
        "modesieve.io.handover.command",
        "export",
        "Write a small model as arrays or as a stand-alone surrogate.",
    ),
    "review": ("modesieve.io.commands.review", "review", "Recompute what a small model's file can prove."),
    "handover": ("modesieve.io.handover.command", "handover", "Bundle a run into one zip with hashes."),
    "simulate": ("modesieve.io.handover.command", "simulate", "Run a small model through an input history."),
}

#: Statuses: 0 done, 1 a stated refusal, 2 wrong usage, 70 a fault of this program (as in sysexits.h), 130 interrupted.
REFUSED, FAULT, INTERRUPTED = 1, 70, 130


class _Commands(click.Group):
    """A group that knows its commands by name and loads one when it is called."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        module, attribute, _ = COMMANDS[cmd_name]
        command: click.Command = getattr(import_module(module), attribute)
        return command

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        if args and args[0] not in COMMANDS and not args[0].startswith("-"):
            raise click.UsageError(f"no command {args[0]!r}{_close(args[0])}", ctx)
        return super().resolve_command(ctx, args)

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl([(name, text) for name, (_, _, text) in COMMANDS.items()])


def _close(name: str) -> str:
    import difflib

    near = difflib.get_close_matches(name, COMMANDS, n=2)
    return f"; did you mean {' or '.join(near)}?" if near else ""


def _version() -> str:
    try:
        return version("modesieve")
    except PackageNotFoundError:
        return "not installed"


def _print_version(ctx: click.Context, param: click.Parameter, value: bool) -> None:
    if value:
        click.echo(f"modesieve {_version()}")
        ctx.exit()


@click.group(cls=_Commands, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.option(
    "--version", is_flag=True, expose_value=False, is_eager=True, callback=_print_version, help="Print the version."
)
def cli() -> None:
    """Shrink a large linear model (structure, thermal, state space) to the few modes that matter, say how wrong the
    small model can be, and hand it over.

    Begin with `modesieve demo`; then `modesieve brief MODEL.h5 > job.toml` and `modesieve run job.toml`.
    """


def main(arguments: Sequence[str] | None = None) -> None:
    """Entry point: runs the command line and ends the process with its status."""
    _tolerant_streams()
    sys.exit(status_of(sys.argv[1:] if arguments is None else list(arguments)))


def status_of(arguments: Sequence[str]) -> int:
    """Run one command line and return its exit status; every message goes to standard error."""
    try:
        cli.main(args=list(arguments), prog_name="modesieve", standalone_mode=False)
    except click.exceptions.Exit as stop:
        return stop.exit_code
    except click.ClickException as wrong:
        wrong.show()
        return wrong.exit_code
    except (KeyboardInterrupt, click.Abort):
        click.echo("interrupted; no file was left half-written", err=True)
        return INTERRUPTED
    except BrokenPipeError:
        _drop_output()
        return 0
    except Exception as error:
        return _explain(error)
    return 0


def _explain(error: Exception) -> int:
    # Imported here: the errors' package pulls in the numerical libraries, which --help must not wait for.
    from modesieve.reduce.errors import ModesieveError

    if isinstance(error, ModesieveError):
        click.echo(str(error), err=True)
        return REFUSED
    if isinstance(error, MemoryError):
        click.echo(
            f"not enough memory ({error or 'no details'})\n  remedy:   a narrower band, or a larger machine", err=True
        )
        return REFUSED
    click.echo(f"modesieve failed: {type(error).__name__}: {error}", err=True)
    click.echo("This is a fault of the program, not of your files. " + _keep_traceback(error), err=True)
    return FAULT


def _keep_traceback(error: Exception) -> str:
    """Put the traceback where it can be sent from, and say where that is."""
    text = f"modesieve {_version()}, Python {sys.version}\n" + "".join(traceback.format_exception(error))
    try:
        with tempfile.NamedTemporaryFile(
            "w", prefix="modesieve-fault-", suffix=".txt", delete=False, encoding="utf-8"
        ) as file:
            file.write(text)
    except OSError:
        return "Please report it with these lines:\n" + text
    return f"Please report it with the file {file.name}"


def _tolerant_streams() -> None:
    """Never fail on a character that the terminal's encoding lacks."""
    for stream in (sys.stdout, sys.stderr):
        reconfigure = getattr(stream, "reconfigure", None)
        if reconfigure is not None:
            reconfigure(errors="replace")


def _drop_output() -> None:
    # The reader (head, less) has gone: without this, closing the stream at exit would complain again.
    import os

    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
