"""The command ``latticedip``: finds the subcommand, and is the one place where errors become exit codes.

Exit status: 0 all well, 1 some of many inputs failed, 2 the input was wrong. Ctrl-C ends with 130 and a reader
that closes the pipe with 141, as shells expect. Nothing heavy is imported before a command runs.
"""

from __future__ import annotations

import contextlib
import importlib
import io
import logging
import os
import sys
import time
import warnings
from typing import Any

import click

from latticedip import __version__
from latticedip.cli.options import report_progress
from latticedip.errors import LatticedipError, near_match

#: Subcommands in the order in which a user meets them; each is found in the module of its name.
COMMANDS = (
    "start", "show", "field", "rank", "directions", "propose", "modes", "batch", "shift", "linewidth", "spectrum",
    "report", "demag",
)  # fmt: skip

EPILOG = """\b
Example:
  latticedip start compound.cif -o study.toml
  latticedip show study.toml
  latticedip rank study.toml

\b
Completion by the tab key, in bash (zsh and fish alike):
  eval "$(_LATTICEDIP_COMPLETE=bash_source latticedip)"
"""

_log = logging.getLogger("latticedip")


class CommandGroup(click.Group):
    """Loads a subcommand only when it is asked for, and turns errors into one message and an exit status."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        command = getattr(importlib.import_module(f"latticedip.cli.{cmd_name}"), cmd_name)
        assert isinstance(command, click.Command)
        return command

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        if args and not args[0].startswith("-") and args[0] not in COMMANDS:
            raise click.UsageError(
                f"no command {args[0]!r}. Commands are: {', '.join(COMMANDS)}.{near_match(args[0], COMMANDS)}", ctx
            )
        return super().resolve_command(ctx, args)

    def invoke(self, ctx: click.Context) -> Any:
        started = time.perf_counter()
        try:
            result = super().invoke(ctx)
        except LatticedipError as error:
            raise WrongInput(str(error)) from None
        except BrokenPipeError:
            _abandon_stdout()
            ctx.exit(141)
        except OSError as error:
            _abandon_stdout()
            where = f"{error.filename}: " if error.filename else ""
            raise WrongInput(f"{where}{error.strerror or error}.") from None
        except MemoryError:
            raise WrongInput("there is not enough memory for this.") from None
        except KeyboardInterrupt:
            click.echo("Interrupted.", err=True)
            ctx.exit(130)
        _log.info("done in %.2f s", time.perf_counter() - started)
        return result


class WrongInput(click.ClickException):
    """Input that cannot be used: its message on stderr, exit status 2."""

    exit_code = 2


def _abandon_stdout() -> None:
    """Send what is left in the buffer nowhere: the interpreter would fail on it once more at its end."""
    with contextlib.suppress(OSError, ValueError):
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _plain_warning(message: Warning | str, category: type[Warning], *_: Any, **__: Any) -> None:
    click.echo(f"Warning: {message}", err=True)


def _prepare_streams() -> None:
    """Let a terminal that does not know Greek letters show something in their place instead of failing."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper) and (stream.encoding or "").lower().replace("-", "") != "utf8":
            stream.reconfigure(errors="replace")


@click.group(
    cls=CommandGroup, epilog=EPILOG, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100}
)
@click.version_option(__version__, prog_name="latticedip")
@click.option("-v", "--verbose", is_flag=True, help="Say on stderr what is being done and how long it takes.")
def main(verbose: bool) -> None:
    """Local fields and energies of magnetic orderings from dipolar lattice sums.

    A study file names a crystal structure, candidate orderings, probe positions and the shape of the sample.
    `start` writes one for a structure, `show` says what was understood, `field`, `rank`, `shift` and `linewidth`
    compute.
    """
    _prepare_streams()
    _log.setLevel(logging.WARNING)
    if verbose:
        report_progress()
    warnings.showwarning = _plain_warning
