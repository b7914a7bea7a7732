"""The commands by which a person decides: limits, baselines, events, sign-off; and the proof that the record is whole."""

from pathlib import Path
from typing import Annotated, cast

import typer

from qa.cli.common import HERE, QuietOption, SiteOption, finish, new_app, put, say, to_day
from qa.errors import ExitStatus

__all__ = ["baseline_app", "event_app", "limits_app", "record_app", "sign"]

WhyOption = Annotated[str, typer.Option("--why", help="The reason; it is kept with the change.")]
NameOption = Annotated[str, typer.Option("--by", help="Your name, beside the operating system's user.")]
ScannerArgument = Annotated[str, typer.Argument(help="A scanner's name from site.toml.")]
QuantitiesOption = Annotated[list[str] | None, typer.Option("--quantity", help="Which quantity; may be given several times.")]

limits_app = new_app(help="Show the limits in force, change them, or try others on the past.")
baseline_app = new_app(help="Accept sessions as a baseline, set one by hand, or show those in force.")
event_app = new_app(help="Record what was done to a scanner, or show what was.")
record_app = new_app(help="Prove that nothing in the record was altered.")


@limits_app.command("show")
def limits_show(
    scanner: Annotated[str | None, typer.Argument(help="A scanner's name; all when not given.", show_default=False)] = None,
    *,
    site: SiteOption = HERE,
) -> None:
    """Show which limit applies to each quantity of each scanner, and why that one.

    Example: evenfield limits show north-3t
    """
    from qa.pipeline import limits_in_force, open_department
    from qa.report.terminal import table_text

    with open_department(site) as department:
        rows = [
            (one.scanner_name, one.phantom, one.quantity, one.limit, one.source, one.why)
            for one in limits_in_force(department, scanner)
        ]
    heads = ("scanner", "phantom", "quantity", "limit", "source", "why")
    put(table_text([(head, False) for head in heads], rows))


@limits_app.command("history")
def limits_history(*, site: SiteOption = HERE) -> None:
    """Show every version of the limits: who wrote it, when and why.

    Example: evenfield limits history
    """
    from qa.pipeline import open_department
    from qa.report.terminal import table_text

    with open_department(site) as department:
        rows = [
            (str(one.version), f"{one.when:%Y-%m-%d %H:%M}", one.who.name or one.who.user, one.sha256[:12], one.why)
            for one in department.record.limit_sets()
        ]
    put(table_text([("version", True), *((head, False) for head in ("written", "by", "hash", "why"))], rows))


@limits_app.command("set")
def limits_set(
    quantity: Annotated[str, typer.Argument(help="The quantity, such as ghosting.")],
    *,
    why: WhyOption,
    source: Annotated[str, typer.Option("--source", help="Where the figure comes from, with its edition.")],
    by: NameOption = "",
    lower: Annotated[float | None, typer.Option("--lower", help="Lowest value allowed.")] = None,
    upper: Annotated[float | None, typer.Option("--upper", help="Highest value allowed.")] = None,
    scanner: Annotated[str, typer.Option("--scanner", help="For which scanner; a pattern.")] = "*",
    phantom: Annotated[str, typer.Option("--phantom", help="For which phantom; a pattern.")] = "*",
    rule: Annotated[str, typer.Option("--rule", help="simple, or guarded.")] = "simple",
    site: SiteOption = HERE,
) -> None:
    """Write a limit into site.toml, and keep the new set as a version with who, when and why.

    Example: evenfield limits set ghosting --upper 2.0 --source "local rule 4, 2026" --why "tightened after review"
    """
    from qa.pipeline import open_department, set_limit

    with open_department(site) as department:
        version = set_limit(
            department,
            {
                "quantity": quantity,
                "scanner": scanner,
                "phantom": phantom,
                "lower": lower,
                "upper": upper,
                "rule": rule,
                "source": source,
            },
            why=why,
            name=by,
        )
    say(f"The limits in force are now version {version}; verdicts given before keep the version they were given by.")


@limits_app.command("what-if")
def limits_what_if(
    file: Annotated[Path, typer.Argument(help="A changed site.toml, anywhere.")],
    *,
    site: SiteOption = HERE,
) -> None:
    """Show which past verdicts another set of limits would alter; nothing is changed.

    Example: evenfield limits what-if stricter.toml
    """
    from qa.pipeline import open_department, what_if
    from qa.report.terminal import table_text

    with open_department(site) as department:
        altered = what_if(department, file)
    rows = [
        (
            one.scanner_name,
            one.day.isoformat(),
            one.phantom,
            one.measurement.quantity,
            f"{one.measurement.value:.6g}",
            "none" if one.was is None else one.was.conformity + (", warned" if one.was.warned else ""),
            "none" if one.would_be is None else one.would_be.conformity + (", warned" if one.would_be.warned else ""),
        )
        for one in altered
    ]
    if not rows:
        say("No past verdict would change.")
        return
    words = [(head, False) for head in ("scanner", "session", "phantom", "quantity")]
    put(table_text([*words, ("value", True), ("was", False), ("would be", False)], rows))


@baseline_app.command("accept")
def baseline_accept(
    scanner: ScannerArgument,
    *,
    first: Annotated[str, typer.Option("--from", help="First day of the sessions you accept.")],
    last: Annotated[str, typer.Option("--to", help="Last day of the sessions you accept.")],
    why: WhyOption,
    by: NameOption = "",
    quantity: QuantitiesOption = None,
    site: SiteOption = HERE,
) -> None:
    """Accept the sessions of a period as good, and take baselines from the first of them.

    Example: evenfield baseline accept north-3t --from 2026-01-05 --to 2026-03-09 --why "looked at, all well"
    """
    from qa.pipeline import accept_baselines, open_department

    begin, end = to_day(first, "--from"), to_day(last, "--to")
    assert begin is not None  # noqa: S101 - both options are required
    assert end is not None  # noqa: S101 - the same
    with open_department(site) as department:
        kept, missing = accept_baselines(
            department, scanner, first=begin, last=end, why=why, name=by, quantities=tuple(quantity or ())
        )
    for one in kept:
        put(f"{one.quantity} on {one.phantom}: {one.value:.6g}, standard uncertainty {one.standard_uncertainty:.2g}")
    for sentence in missing:
        say(sentence)
    if not kept:
        finish(ExitStatus.NEEDS_A_PERSON)


@baseline_app.command("set")
def baseline_set(
    scanner: ScannerArgument,
    quantity: Annotated[str, typer.Argument(help="The quantity, such as snr.")],
    value: Annotated[float, typer.Argument(help="Its value, in the quantity's unit.")],
    *,
    uncertainty: Annotated[float, typer.Option("--uncertainty", help="Its standard uncertainty.")],
    since: Annotated[str, typer.Option("--since", help="The first day it counts for.")],
    why: WhyOption,
    by: NameOption = "",
    phantom: Annotated[str, typer.Option("--phantom", help="On which phantom; a pattern.")] = "*",
    site: SiteOption = HERE,
) -> None:
    """Set a baseline by hand.

    Example: evenfield baseline set north-3t snr 212 --uncertainty 2 --since 2026-01-05 --why "acceptance test"
    """
    from qa.pipeline import open_department, set_baseline

    day = to_day(since, "--since")
    assert day is not None  # noqa: S101 - the option is required
    with open_department(site) as department:
        number = set_baseline(department, scanner, quantity, value, uncertainty, since=day, phantom=phantom, why=why, name=by)
    say(f"Kept as entry {number} of the record.")


@baseline_app.command("show")
def baseline_show(
    scanner: Annotated[str | None, typer.Argument(help="A scanner's name; all when not given.", show_default=False)] = None,
    *,
    site: SiteOption = HERE,
) -> None:
    """Show the baselines, how each came about, and who accepted it.

    Example: evenfield baseline show north-3t
    """
    from qa.pipeline import open_department
    from qa.report.terminal import table_text

    with open_department(site) as department:
        if scanner is not None:
            department.site.scanner(scanner)
        rows = [
            (
                kept.what.scanner_name,
                kept.what.quantity,
                kept.what.phantom,
                f"{kept.what.value:.6g}",
                f"{kept.what.standard_uncertainty:.2g}",
                kept.what.since.isoformat(),
                kept.who.name or kept.who.user,
                kept.what.method,
                kept.why,
            )
            for kept in department.record.baselines(scanner)
        ]
    heads = (
        *((head, False) for head in ("scanner", "quantity", "phantom")),
        *((head, True) for head in ("value", "u")),
        *((head, False) for head in ("since", "by", "method", "why")),
    )
    put(table_text(heads, rows))


@event_app.command("add")
def event_add(
    scanner: ScannerArgument,
    *,
    kind: Annotated[str, typer.Option("--kind", help="service, repair, replacement, upgrade, calibration, ...")],
    day: Annotated[str, typer.Option("--day", help="The day, as 2026-11-23.")],
    text: Annotated[str, typer.Option("--text", help="What was done.")],
    until: Annotated[str | None, typer.Option("--until", help="Last day of a downtime.")] = None,
    quantity: QuantitiesOption = None,
    restart: Annotated[bool, typer.Option("--restart-baseline", help="What came before no longer counts.")] = False,
    by: NameOption = "",
    site: SiteOption = HERE,
) -> None:
    """Record a service event; reports show it on the charts.

    Example: evenfield event add north-3t --kind replacement --day 2026-09-04 --text "head coil element 3" --restart-baseline
    """
    from qa.pipeline import add_event, open_department
    from qa.records import Event, EventKind

    on, end = to_day(day, "--day"), to_day(until, "--until")
    assert on is not None  # noqa: S101 - the option is required
    event = Event(scanner, on, cast("EventKind", kind), text, tuple(quantity or ()), restart, end)
    with open_department(site) as department:
        number = add_event(department, event, name=by)
    say(f"Kept as entry {number} of the record.")


@event_app.command("list")
def event_list(
    scanner: Annotated[str | None, typer.Argument(help="A scanner's name; all when not given.", show_default=False)] = None,
    *,
    site: SiteOption = HERE,
) -> None:
    """Show the service events.

    Example: evenfield event list north-3t
    """
    from qa.pipeline import open_department
    from qa.report.terminal import table_text

    with open_department(site) as department:
        if scanner is not None:
            department.site.scanner(scanner)
        rows = [
            (
                kept.what.scanner_name,
                kept.what.day.isoformat(),
                kept.what.kind,
                kept.what.text,
                ", ".join(kept.what.quantities) or "all",
                "baselines begin anew" if kept.what.restarts_baseline else "",
                kept.who.name or kept.who.user,
            )
            for kept in department.record.events(scanner)
        ]
    heads = ("scanner", "day", "kind", "what", "quantities", "", "by")
    put(table_text([(head, False) for head in heads], rows))


@record_app.command("verify")
def record_verify(*, site: SiteOption = HERE, quiet: QuietOption = False) -> None:
    """Prove that nothing in the record was altered, removed or reordered, or say where it was.

    Exit status 4 where the record is not whole.

    Example: evenfield record verify
    """
    from qa.pipeline import open_department

    with open_department(site) as department:
        found = department.record.verify()
    if not quiet:
        for remark in found.remarks:
            say(remark)
    for problem in found.problems:
        put(problem)
    if not found.whole:
        finish(ExitStatus.COULD_NOT_FINISH)
    if not quiet:
        put(f"The record is whole: {found.head.number} entries, the last one's hash is {found.head.hash}.")


def sign(
    scanner: ScannerArgument,
    *,
    first: Annotated[str, typer.Option("--from", help="First day of the period.")],
    last: Annotated[str, typer.Option("--to", help="Last day of the period.")],
    by: Annotated[str, typer.Option("--by", help="The name of the person who signs.")],
    comment: Annotated[str, typer.Option("--comment", help="What is to stand beside the signature.")] = "",
    site: SiteOption = HERE,
) -> None:
    """Sign a period of one scanner off, by name.

    Example: evenfield sign north-3t --from 2026-10-01 --to 2026-10-31 --by "R. Example" --comment "reviewed"
    """
    from qa.pipeline import open_department
    from qa.store import current_user

    begin, end = to_day(first, "--from"), to_day(last, "--to")
    assert begin is not None  # noqa: S101 - both options are required
    assert end is not None  # noqa: S101 - the same
    with open_department(site) as department:
        number = department.record.sign(
            department.site.scanner(scanner).name,
            begin,
            end,
            comment=comment,
            who=current_user(by),
            today=department.today,
            when=department.now,
        )
    say(f"Signed, as entry {number} of the record.")
