"""The commands: read arguments, call one function, print. Nothing is computed here."""

import os
import sys
from typing import Annotated

import typer

from qa.cli import daily, decisions
from qa.cli.common import new_app, put, say
from qa.errors import EvenfieldError, ExitStatus
from qa.version import __version__

__all__ = ["app", "main"]

app = new_app(
    name="evenfield",
    help="Keeps MR scanners honest: phantom images in, figures with uncertainty, limits, history and a dated PDF report out.",
)
for command in (
    daily.init,
    daily.measure,
    daily.ingest,
    daily.check,
    daily.status,
    daily.report,
    daily.board,
    daily.commission,
    daily.demo,
    decisions.sign,
):
    app.command()(command)
app.add_typer(decisions.limits_app, name="limits")
app.add_typer(decisions.baseline_app, name="baseline")
app.add_typer(decisions.event_app, name="event")
app.add_typer(decisions.record_app, name="record")


def _version(wanted: bool) -> None:
    if wanted:
        put(f"evenfield {__version__}")
        raise typer.Exit


@app.callback()
def _root(
    *,
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version and stop.")
    ] = False,
) -> None:
    """Keep MR scanners honest: phantom images in, figures with uncertainty, limits, history and a dated PDF report out."""


def main() -> None:
    """Run the program; whatever goes wrong ends in one sentence and the documented exit status."""
    try:
        app()
    except EvenfieldError as error:
        say(f"evenfield: {error}")
        raise SystemExit(int(error.exit_status)) from None
    except KeyboardInterrupt:
        say("evenfield: stopped; what was done is kept, and a rerun goes on from there.")
        raise SystemExit(int(ExitStatus.COULD_NOT_FINISH)) from None
    except BrokenPipeError:
        # The reader of our output has gone; Python would complain once more while closing it.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        raise SystemExit(int(ExitStatus.COULD_NOT_FINISH)) from None
    except Exception as error:
        if os.environ.get("EVENFIELD_TRACEBACK"):
            raise
        say(
            f"evenfield: a fault in the program itself ({type(error).__name__}): what was done is kept. "
            "Set EVENFIELD_TRACEBACK=1 and run again to see where."
        )
        raise SystemExit(int(ExitStatus.COULD_NOT_FINISH)) from None
