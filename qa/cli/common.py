"""What all commands share: options, printing, dates, progress."""

import sys
from collections.abc import Iterable, Sequence
from datetime import date
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from qa.errors import ExitStatus, UsageError

if TYPE_CHECKING:
    from qa.pipeline import Progress

__all__ = [
    "HERE",
    "JsonOption",
    "PathsArgument",
    "QuietOption",
    "SiteOption",
    "finish",
    "new_app",
    "progress",
    "put",
    "say",
    "to_day",
]


def new_app(**settings: Any) -> typer.Typer:  # noqa: ANN401 - typer's own options
    """Make a group of commands in the program's style."""
    return typer.Typer(
        no_args_is_help=True,
        add_completion=False,
        rich_markup_mode=None,
        pretty_exceptions_enable=False,
        context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
        **settings,
    )


SiteOption = Annotated[
    Path, typer.Option("--site", envvar="EVENFIELD_SITE", help="The department folder, the one with site.toml.")
]
JsonOption = Annotated[bool, typer.Option("--json", help="Print the figures as one JSON object, and nothing else.")]
QuietOption = Annotated[bool, typer.Option("--quiet", "-q", help="Say nothing that is not needed.")]
PathsArgument = Annotated[list[Path], typer.Argument(help="Folders or files of DICOM images.", show_default=False)]
HERE = Path()


def say(text: str) -> None:
    """Print what is not a figure, to standard error."""
    print(text, file=sys.stderr)  # noqa: T201 - this is where the program speaks


def put(text: str) -> None:
    """Print figures, to standard output."""
    print(text)  # noqa: T201 - this is where the program answers


def to_day(text: str | None, option: str) -> date | None:
    """Read a date as an option gives it; None where it was not given."""
    if text is None:
        return None
    try:
        return date.fromisoformat(text)
    except ValueError:
        raise UsageError(f"{option}: {text!r} is not a date: write it as 2026-11-23.") from None


def progress(*, quiet: bool) -> "Progress":
    """Return a wrapper that shows a bar on a terminal, and nothing when output is redirected."""

    def plain(items: Sequence[Any], _title: str) -> Iterable[Any]:
        return items

    def bar(items: Sequence[Any], title: str) -> Iterable[Any]:
        from rich.console import Console
        from rich.progress import track

        return track(items, description=title, console=Console(stderr=True), transient=True)

    return plain if quiet or not sys.stderr.isatty() else bar


def finish(status: ExitStatus) -> None:
    """End the command with an exit status."""
    raise typer.Exit(int(status))
