"""The commands gathered, and the one place where errors become messages and exit codes."""

from __future__ import annotations

import sys
import traceback
from typing import Annotated

import typer

from qa import __version__
from qa.cli import audit, compare, drift, due, export, ingest, log, migrate, new, remeasure, report, rule, simulate
from qa.cli.terminal import complain, print_document
from qa.errors import VialbookError

EXIT_CODES = (
    "Exit codes: 0 done and steady; 1 done, and something needs attention; "
    "2 the command was used wrongly or the configuration is invalid; 3 the work could not be done."
)

app = typer.Typer(
    name="vialbook",
    no_args_is_help=True,
    add_completion=False,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)
for command in (new, ingest, due, log, drift, compare, report, rule, audit, remeasure, export, migrate, simulate):
    name = command.__name__.rsplit(".", 1)[-1]
    app.command(name=name, epilog=EXIT_CODES)(getattr(command, name))


def _show_version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"vialbook {__version__}")
        raise typer.Exit


@app.callback(epilog=f"{EXIT_CODES} Not a medical device: a qualified physicist decides.")
def _root(
    version: Annotated[
        bool, typer.Option("--version", callback=_show_version, is_eager=True, help="Show the version and stop.")
    ] = False,
) -> None:
    """Keep MR relaxometry honest: measure T1 and T2 in a phantom's vials, and watch them for drift."""


def run(arguments: list[str]) -> int:
    """Run one command; gives its exit code."""
    try:
        app(args=arguments, prog_name="vialbook")
    except SystemExit as done:
        return done.code if isinstance(done.code, int) else 3
    except VialbookError as error:
        if "--json" in arguments:
            told = {"what": error.what, "where": error.where or None, "remedy": error.remedy or None}
            print_document({"contract": 1, "error": told | {"exit_code": error.exit_code}})
        complain(f"vialbook: {error}")
        return error.exit_code
    except KeyboardInterrupt:
        complain("vialbook: stopped. What was recorded stays; the same command goes on from there.")
        return 3
    except BrokenPipeError:
        sys.stderr.close()
        return 3
    except Exception:  # noqa: BLE001 - the last line of defence: Python's own exit code, 1, means something else here
        traceback.print_exc()
        complain("vialbook: this is a fault of Vialbook's, not of your data. Please report it with the lines above.")
        return 3
    return 0
