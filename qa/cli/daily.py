"""The commands of every day: start, measure, take in, check, look, report, commission, show."""

from pathlib import Path
from typing import Annotated

import typer

from qa.cli.common import HERE, JsonOption, PathsArgument, QuietOption, SiteOption, finish, progress, put, say, to_day
from qa.errors import ExitStatus

__all__ = ["board", "check", "commission", "demo", "ingest", "init", "measure", "report", "status"]


def init(folder: Annotated[Path, typer.Argument(help="The new department folder.")]) -> None:
    """Start a department folder with a commented site.toml.

    Example: evenfield init /srv/mr-qa
    """
    from qa.site import write_site_template

    path = write_site_template(folder)
    say(
        f"{path} is a worked example: put in your scanners and what is expected of each, then copy series into {folder}/inbox."
    )


def measure(
    paths: PathsArgument,
    *,
    phantom: Annotated[
        str, typer.Option("--phantom", help="A shipped phantom's name, or the path of your own definition (.toml).")
    ],
    as_json: JsonOption = False,
    quiet: QuietOption = False,
) -> None:
    """Measure a folder of DICOM files and print the figures; nothing is stored.

    Example: evenfield measure scans/monday --phantom sphere-170
    """
    from qa.pipeline import measure_paths

    outcomes, refused = measure_paths(paths, phantom, progress(quiet=quiet))
    if as_json:
        from qa.report.figures_json import measurements_document, to_json

        put(to_json(measurements_document(outcomes, refused)))
    else:
        from qa.report.terminal import outcome_text

        for outcome in outcomes:
            put(outcome_text(outcome))
    if not quiet:
        for one in refused:
            say(f"refused {one.path}: {one.reason}")
    if not outcomes:
        if not refused and not quiet:
            say(f"{', '.join(map(str, paths))}: no DICOM image was found: give a folder that holds a phantom's series.")
        finish(ExitStatus.NEEDS_A_PERSON)
    if refused or any(outcome.pose is None for outcome in outcomes):
        finish(ExitStatus.NEEDS_A_PERSON)


def ingest(
    paths: Annotated[
        list[Path] | None, typer.Argument(help="Folders or files; the inbox when none is given.", show_default=False)
    ] = None,
    *,
    site: SiteOption = HERE,
    quiet: QuietOption = False,
) -> None:
    """Take series in: measure, judge, file away, record. With no path, from the inbox.

    Example: evenfield ingest --site /srv/mr-qa
    """
    from qa.pipeline import open_department, survey, take_in
    from qa.report.terminal import refused_line, taken_line

    with open_department(site) as department:
        intake = take_in(department, paths or (), progress(quiet=quiet))
        if not quiet:
            for taken in intake.taken:
                say(taken_line(taken.scanner_name, taken.outcome, taken.verdicts))
            for one in intake.refused:
                say(refused_line(one))
            counts = (len(intake.taken), intake.skipped, len(intake.refused))
            say("{} acquisitions taken in, {} files known already, {} refused".format(*counts))
        finish(survey(department).exit_status(attention=intake.needs_a_person))


def check(
    *,
    site: SiteOption = HERE,
    mail: Annotated[
        Path | None, typer.Option("--mail-text", help="Write the run's mail into this folder, as mail.txt and mail.html.")
    ] = None,
    quiet: QuietOption = False,
) -> None:
    """Run the scheduled job: take the inbox in, look for scanners out of limits or overdue, print only what needs a person.

    Example (crontab): 30 6 * * * evenfield check --site /srv/mr-qa
    """
    from qa.pipeline import mail_text, open_department, survey, take_in
    from qa.report.mail import write_mail
    from qa.report.terminal import attention_lines, refused_line, taken_line

    with open_department(site) as department:
        intake = take_in(department)
        found = survey(department)
        if not quiet:
            for line in attention_lines(found.assessments):
                put(line)
            for taken in intake.unmeasured:
                put(taken_line(taken.scanner_name, taken.outcome, taken.verdicts))
            for one in intake.refused:
                put(refused_line(one))
            for remark in found.sentences:
                put(remark)
        if mail is not None:
            write_mail(mail, mail_text(department, intake, found))
        finish(found.exit_status(attention=intake.needs_a_person))


def status(
    *,
    site: SiteOption = HERE,
    as_of: Annotated[str | None, typer.Option("--as-of", help="The day to look from; today when not given.")] = None,
    as_json: JsonOption = False,
    quiet: QuietOption = False,
) -> None:
    """Show the fleet at a glance, one line a scanner.

    Example: evenfield status --site /srv/mr-qa
    """
    from qa.pipeline import open_department, survey

    day = to_day(as_of, "--as-of")
    with open_department(site) as department:
        found = survey(department, day)
        if as_json:
            from qa.report.figures_json import status_document, to_json

            put(to_json(status_document(found.at, found.assessments, found.sentences)))
        elif not quiet:
            from qa.report.terminal import status_table

            put(status_table(found.assessments))
            for remark in found.sentences:
                say(remark)
        finish(found.exit_status())


def report(
    scanners: Annotated[
        list[str] | None, typer.Argument(help="Names from site.toml; all of them when none is given.", show_default=False)
    ] = None,
    *,
    site: SiteOption = HERE,
    first: Annotated[str | None, typer.Option("--from", help="First day of the period, as 2026-01-31.")] = None,
    last: Annotated[str | None, typer.Option("--to", help="Last day of the period.")] = None,
    as_of: Annotated[
        str | None, typer.Option("--as-of", help="The day the report is dated with; today when not given.")
    ] = None,
    page: Annotated[str | None, typer.Option("--page", help="A4 or Letter; site.toml decides when not given.")] = None,
    pin_up: Annotated[
        bool, typer.Option("--pin-up", help="In place of the report, a sheet for technologists to pin up beside the scanner.")
    ] = False,
    quiet: QuietOption = False,
) -> None:
    """Render the dated PDF trend report of each scanner, and that of the fleet when no scanner is named.

    Example: evenfield report north-3t --from 2026-01-01 --to 2026-12-31
    """
    from qa.pipeline import open_department, write_pin_ups, write_reports

    days = (to_day(first, "--from"), to_day(last, "--to"), to_day(as_of, "--as-of"))
    with open_department(site) as department:
        if pin_up:
            for path in write_pin_ups(department, scanners or (), days[2]):
                put(str(path))
            return
        for path in write_reports(department, scanners or (), *days, page=page, progress=progress(quiet=quiet)):
            put(str(path))


def commission(
    *,
    phantom: Annotated[
        list[str] | None,
        typer.Option(
            "--phantom", help="A shipped phantom's name or your own definition (.toml); all shipped ones when not given."
        ),
    ] = None,
    cases: Annotated[int | None, typer.Option("--cases", help="Digital scans of each phantom; 200 when not given.")] = None,
    seed: Annotated[
        int | None, typer.Option("--seed", help="Seed of the first scan; without --cases that one scan is made and printed.")
    ] = None,
    report: Annotated[Path | None, typer.Option("--report", help="Write the evidence to this new PDF file.")] = None,
    as_of: Annotated[
        str | None, typer.Option("--as-of", help="The day the report is dated with; today when not given.")
    ] = None,
    page: Annotated[str, typer.Option("--page", help="A4 or Letter.")] = "A4",
    jobs: Annotated[int | None, typer.Option("--jobs", help="Processes to run on; all cores when not given.")] = None,
    as_json: JsonOption = False,
    quiet: QuietOption = False,
) -> None:
    """Measure digital phantoms of known truth on this machine: error and stated uncertainty side by side.

    Exit status 1 where a bar of accuracy or coverage is missed.

    Example: evenfield commission --phantom sphere-170 --cases 500 --report commissioning.pdf
    """
    from qa.commission import check_target, run_commission, write_evidence
    from qa.report.commission import page_size, render_commission_report
    from qa.report.commission_words import commission_document, commission_text

    day, paper = to_day(as_of, "--as-of"), page_size(page)
    if report is not None:
        check_target(report)
    result = run_commission(phantom, cases, seed, jobs, progress(quiet=quiet))
    if as_json:
        from qa.report.figures_json import to_json

        put(to_json(commission_document(result)))
    else:
        put(commission_text(result, each_case=seed is not None and cases is None))
    if report is not None:
        write_evidence(report, render_commission_report(result, day, paper))
        if not quiet:
            say(f"{report} is the evidence for the file.")
    finish(ExitStatus.DONE if result.met else ExitStatus.OUT_OF_LIMITS)


def board(
    folder: Annotated[Path, typer.Argument(help="Where to: a new or an empty folder, or an earlier board.")],
    *,
    site: SiteOption = HERE,
    as_of: Annotated[str | None, typer.Option("--as-of", help="The day to look from; today when not given.")] = None,
    quiet: QuietOption = False,
) -> None:
    """Write the same content as a static web site, for the intranet or a wall screen; it works from a file share.

    Example: evenfield board /srv/www/mr-qa --site /srv/mr-qa
    """
    from qa.pipeline import open_department, publish_board

    day = to_day(as_of, "--as-of")
    with open_department(site) as department:
        put(str(publish_board(department, folder, day, progress(quiet=quiet))))


def demo(
    folder: Annotated[Path, typer.Argument(help="Where to build it: a new or an empty folder.")] = Path("evenfield-demo"),
    *,
    quiet: QuietOption = False,
) -> None:
    """Build an invented department of digital phantoms and run the whole job on it, from empty folder to PDF.

    Example: evenfield demo /tmp/saltmarsh
    """
    from qa.demo import build_demo

    for line in build_demo(folder, progress(quiet=quiet)):
        put(line)
