"""The command `geoclust`: its parts, and how errors and interrupts are told."""

from __future__ import annotations

import logging
import signal
import sys
import warnings
from collections.abc import Sequence
from types import FrameType, TracebackType

import click

from geoclust.cli.analyse import analyse
from geoclust.cli.audit import audit
from geoclust.cli.describe import describe
from geoclust.cli.fit import fit
from geoclust.cli.locate import locate
from geoclust.cli.options import as_typed
from geoclust.cli.simulate import simulate
from geoclust.errors import GeoclustError
from geoclust.version import __version__

INTERRUPTED = 128 + signal.SIGINT


class _InOrder(click.Group):
    """Lists its commands in the order in which a survey goes through them."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(self.commands)


@click.group(
    cls=_InOrder,
    no_args_is_help=False,
    invoke_without_command=True,
    context_settings={"help_option_names": ["--help"], "max_content_width": 100},
)
@click.version_option(__version__, prog_name="geoclust", message="%(prog)s %(version)s")
@click.option("--traceback", is_flag=True, help="Show where in the program an unexpected error came up.")
@click.pass_context
def cli(ctx: click.Context, traceback: bool) -> int:
    """Find clusters in a mapped field survey: how many, how large, how sure, and where.

    POINTS holds the mapped individuals, AREA the study area in which every one of them was looked for; both
    are files that GDAL reads and may be the same one. `geoclust analyse` does the whole job.

    Exit status: 0 done, 1 failed, 2 wrong usage, 3 done, but the data cannot tell.
    """
    if ctx.invoked_subcommand is not None:
        return 0
    click.echo(ctx.get_help(), err=True)
    return click.UsageError.exit_code


for _command in (audit, describe, fit, locate, simulate, analyse):
    cli.add_command(_command)


def run(arguments: Sequence[str]) -> int:
    """Run a command line and return its exit status; errors meant for people become one line on stderr."""
    given = list(arguments)
    try:
        status = cli.main(args=given, prog_name="geoclust", standalone_mode=False, obj=given)
    except click.UsageError as error:
        where = error.ctx.command_path if error.ctx is not None else "geoclust"
        _tell(f"{error.format_message().rstrip('.')}. See {where} --help.")
        return error.exit_code
    except click.ClickException as error:
        _tell(error.format_message())
        return error.exit_code
    except GeoclustError as error:
        _tell(as_typed(str(error)))
        return error.exit_status
    except (KeyboardInterrupt, click.Abort):
        _tell("interrupted; nothing was written.")
        return INTERRUPTED
    return status if isinstance(status, int) else 0


def main() -> None:
    """Entry point of the command."""
    # what libraries warn of is for their users, not for ours
    if "--traceback" not in sys.argv[1:]:
        sys.excepthook = _unexpected
        warnings.simplefilter("ignore")
        logging.disable(logging.WARNING)
    signal.signal(signal.SIGTERM, _terminated)
    sys.exit(run(sys.argv[1:]))


def _unexpected(kind: type[BaseException], error: BaseException, trace: TracebackType | None) -> None:
    """One line for what nobody foresaw; Python leaves with status 1 after it."""
    if issubclass(kind, MemoryError):
        _tell("out of memory; nothing was written. Use larger cells (--cell) or fewer points.")
        return
    said = f"{kind.__name__}: {error}".splitlines()[0]
    _tell(
        f"unexpected error ({said}); nothing was written. Please report it with what `geoclust "
        "--traceback` shows."
    )


def _terminated(number: int, frame: FrameType | None) -> None:
    # leaving as an exception lets half-written folders be removed
    raise SystemExit(128 + number)


def _tell(text: str) -> None:
    click.echo(f"geoclust: {text}", err=True)
