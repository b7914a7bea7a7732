"""Read and check site.toml: every mistake ends in one sentence that names file, line, table and key."""

import re
import tomllib
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from datetime import date
from fnmatch import fnmatchcase
from pathlib import Path
from typing import Any
from urllib.parse import unquote

from pydantic import BaseModel, ValidationError

from qa.errors import SiteError
from qa.phantoms import Phantom, load_phantom, phantom_names
from qa.records import Limit
from qa.site.limits import LimitTable, did_you_mean, limits_json, limits_sha256, shipped_limits
from qa.site.tables import (
    Charts,
    Department,
    Downtime,
    Expectation,
    Mail,
    Match,
    RecordPlace,
    ReportSettings,
    SiteFile,
    SiteScanner,
)

__all__ = ["FILE_NAME", "Site", "load_site"]

FILE_NAME = "site.toml"
_TABLES: dict[str, type[BaseModel]] = {
    "department": Department,
    "record": RecordPlace,
    "scanner": SiteScanner,
    "expect": Expectation,
    "limit": LimitTable,
    "downtime": Downtime,
    "mail": Mail,
    "charts": Charts,
    "report": ReportSettings,
}
_REPEATED = {"scanner", "expect", "limit", "downtime"}
_NESTED: dict[tuple[str, str], type[BaseModel]] = {("scanner", "match"): Match}


@dataclass(frozen=True, eq=False)
class Site:
    """A department: all that its site.toml says, checked.

    Attributes
    ----------
    folder : pathlib.Path
        The department folder.
    scanners, expectations, downtimes
        In the order of the file.
    limits : tuple of Limit
        The department's own in the order of the file, then the shipped defaults.
    mail : Mail or None
        None where nobody is to be told.
    phantoms, phantom_files : mapping
        Definition and file of every phantom that is expected, by name.
    """

    folder: Path
    department: Department
    record: RecordPlace
    scanners: tuple[SiteScanner, ...]
    expectations: tuple[Expectation, ...]
    downtimes: tuple[Downtime, ...]
    limits: tuple[Limit, ...]
    mail: Mail | None
    charts: Charts
    report: ReportSettings
    phantoms: Mapping[str, Phantom]
    phantom_files: Mapping[str, Path | None]

    @property
    def inbox(self) -> Path:
        """Where series arrive."""
        return self.folder / "inbox"

    @property
    def archive(self) -> Path:
        """Every file taken in."""
        return self.folder / "archive"

    @property
    def refused(self) -> Path:
        """What was not taken in, each with its reason beside it."""
        return self.folder / "refused"

    @property
    def reports(self) -> Path:
        """Dated PDFs, one folder a year."""
        return self.folder / "reports"

    @property
    def limits_json(self) -> str:
        """The limits in force as canonical JSON, as the record keeps them."""
        return limits_json(self.limits)

    @property
    def limits_sha256(self) -> str:
        """Content hash of the limits in force."""
        return limits_sha256(self.limits)

    @property
    def record_url(self) -> str:
        """The record's database URL, with the path of an SQLite file made absolute."""
        url = self.record.url
        if url.startswith("sqlite"):
            scheme, _, path = url.partition(":///")
            return f"{scheme}:///{(self.folder / unquote(path)).resolve()}"
        return url if "+" in url.partition(":")[0] else url.replace("postgresql:", "postgresql+psycopg:", 1)

    def downtimes_of(self, scanner_name: str) -> tuple[tuple[date, date | None], ...]:
        """Give the planned downtime of a scanner: first and last day, no last day meaning until further notice."""
        return tuple((d.first_day, d.last_day) for d in self.downtimes if any(fnmatchcase(scanner_name, p) for p in d.scanner))

    def scanner(self, name: str) -> SiteScanner:
        """Look a scanner up by its name.

        Raises
        ------
        SiteError
            There is none of that name.
        """
        found = next((s for s in self.scanners if s.name == name), None)
        if found is None:
            hint = did_you_mean(name, (s.name for s in self.scanners))
            raise SiteError(f"{self.folder / FILE_NAME}: there is no scanner {name!r}: {hint}.")
        return found


def load_site(folder: Path, file: Path | None = None) -> Site:
    """Read and check `site.toml` in a department folder.

    Parameters
    ----------
    folder : pathlib.Path
        The department folder.
    file : pathlib.Path or None
        Another file to read in its place, as if it were that folder's own: a change that is only tried.

    Returns
    -------
    Site
        The department.

    Raises
    ------
    SiteError
        The file is missing, unreadable or wrong; one sentence names file, line, table, key, what was found and what is
        allowed.
    PhantomError
        The definition of a phantom of the department's own is wrong.
    """
    folder = Path(folder)
    path = file or folder / FILE_NAME
    text = _read(path)
    try:
        document = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise SiteError(f"{path}: is not valid TOML: {error}.") from error
    except RecursionError as error:
        raise SiteError(f"{path}: is not valid TOML: it is nested too deeply.") from error
    checker = _Checker(path, text, folder)
    checker.shape(document)
    own = checker.limits(document.pop("limit", []))
    try:
        tables = SiteFile.model_validate(document)
    except ValidationError as error:
        raise checker.error(error) from error
    checker.scanners(tables.scanner)
    phantoms, paths, expectations = checker.phantoms(tables.expect)
    names = [s.name for s in tables.scanner]
    for table, entries in (
        ("expect", [e.scanner for e in tables.expect]),
        ("downtime", [d.scanner for d in tables.downtime]),
    ):
        for number, patterns in enumerate(entries):
            checker.known((table, number, "scanner"), patterns, names)
    for number, limit in own:
        checker.known(("limit", number, "scanner"), (limit.scanner,), names)
        checker.known(("limit", number, "phantom"), (limit.phantom,), sorted({*phantom_names(), *phantoms}))
    return Site(
        folder=folder,
        department=tables.department,
        record=tables.record,
        scanners=tables.scanner,
        expectations=expectations,
        downtimes=tables.downtime,
        limits=(*(limit for _, limit in own), *shipped_limits()),
        mail=tables.mail,
        charts=tables.charts,
        report=tables.report,
        phantoms=phantoms,
        phantom_files=paths,
    )


def _read(path: Path) -> str:
    try:
        content = path.read_bytes()
    except FileNotFoundError:
        raise SiteError(
            f"{path}: there is no such file: run 'evenfield init {path.parent}' to start a department folder, "
            "or name one with --site."
        ) from None
    except OSError as error:
        raise SiteError(f"{path}: cannot be read ({error.strerror}): check the path and its permissions.") from error
    try:
        return content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        raise SiteError(f"{path}, line {line}: is not UTF-8 text: save the file as UTF-8.") from None


class _Checker:
    """Turns what is wrong in one file into the sentence that says so."""

    def __init__(self, path: Path, text: str, folder: Path) -> None:
        self.path, self.folder = path, folder
        self.lines = list(_table_lines(text))

    def wrong(self, where: tuple[str | int, ...], what: str) -> SiteError:
        """Make the error for a place such as ("limit", 1, "upper"); a place's number counts from 0."""
        keys = [str(part) for part in where if isinstance(part, str)]
        table, number = keys[0], next((part for part in where if isinstance(part, int)), None)
        label = f"[[{table}]] number {number + 1}" if table in _REPEATED and number is not None else f"[{table}]"
        line = self._line(table, 0 if number is None or table not in _REPEATED else number, keys[1:])
        place = f"{self.path}, line {line}" if line else str(self.path)
        key = f", {'.'.join(keys[1:])}" if keys[1:] else ""
        return SiteError(f"{place}: {label}{key}: {what}.")

    def _line(self, table: str, number: int, keys: list[str]) -> int | None:
        found = [(line, body) for name, line, body in self.lines if name == table]
        if number >= len(found):
            return None
        line, body = found[number]
        return body.get(keys[0], line) if keys else line

    def error(self, error: ValidationError, table: str | None = None, number: int | None = None) -> SiteError:
        """Say the first thing that pydantic found, in plain words."""
        problems = error.errors()
        first = min(problems, key=lambda p: p["type"] != "extra_forbidden")
        before: tuple[str | int, ...] = () if table is None else (table,) if number is None else (table, number)
        where = (*before, *first["loc"])
        return self.wrong(where, _said(first, where))

    def shape(self, document: dict[str, Any]) -> None:
        """Check that the tables are known ones, single or repeated as they should be."""
        for name, content in document.items():
            if name not in _TABLES:
                raise self.wrong((name,), f"there is no such table: {did_you_mean(name, _TABLES)}")
            if name in _REPEATED:
                if not (isinstance(content, list) and content and all(isinstance(entry, dict) for entry in content)):
                    raise self.wrong((name,), f"is written with two brackets, [[{name}]], once for each {name}")
            elif not isinstance(content, dict):
                raise self.wrong((name,), f"is written once, with one bracket, [{name}]")
        for name in ("department", "scanner", "expect"):
            if name not in document:
                brackets = f"[[{name}]]" if name in _REPEATED else f"[{name}]"
                raise SiteError(f"{self.path}: the table {brackets} is missing: 'evenfield init' writes a worked example.")

    def limits(self, tables: list[dict[str, Any]]) -> list[tuple[int, Limit]]:
        """Check the department's own limits, each by itself and against each other."""
        own: list[tuple[int, Limit]] = []
        seen: dict[str, tuple[int, Limit]] = {}
        for number, table in enumerate(tables):
            try:
                limits = LimitTable.model_validate(table).limits()
            except ValidationError as error:
                raise self.error(error, "limit", number) from error
            for limit in limits:
                if limit.key in seen:
                    first, other = seen[limit.key]
                    verb = "repeats" if replace(other, source=limit.source) == limit else "contradicts"
                    raise self.wrong(
                        ("limit", number), f"{verb} [[limit]] number {first + 1}: both are for {limit.key}; keep one"
                    )
                seen[limit.key] = number, limit
                own.append((number, limit))
        return own

    def scanners(self, scanners: tuple[SiteScanner, ...]) -> None:
        """Check that no two scanners share a name or are known by the same header values."""
        for number, scanner in enumerate(scanners):
            for first, other in enumerate(scanners[:number]):
                if scanner.name.casefold() == other.name.casefold():
                    raise self.wrong(
                        ("scanner", number, "name"), f"{scanner.name!r} is the name of [[scanner]] number {first + 1} too"
                    )
                station, serial = scanner.match.station or "", scanner.match.serial or ""
                if scanner.match.keys == other.match.keys and other.match.agrees(station, serial):
                    raise self.wrong(
                        ("scanner", number, "match"),
                        f"is the same as that of [[scanner]] number {first + 1}: a header could not tell them apart",
                    )

    def phantoms(
        self, expectations: tuple[Expectation, ...]
    ) -> tuple[dict[str, Phantom], dict[str, Path | None], tuple[Expectation, ...]]:
        """Load every phantom that is expected, and put its name in place of the path of a department's own file."""
        shipped = phantom_names()
        found: dict[str, Phantom] = {}
        paths: dict[str, Path | None] = {}
        named = []
        for number, expectation in enumerate(expectations):
            where = ("expect", number, "phantom")
            own = expectation.phantom.endswith(".toml")
            path = self.folder / expectation.phantom if own else None
            if not own and expectation.phantom not in shipped:
                raise self.wrong(
                    where,
                    f"there is no phantom {expectation.phantom!r}: {did_you_mean(expectation.phantom, shipped)}; "
                    "a phantom of your own is given by the path of its .toml file",
                )
            if path is not None and not path.is_file():
                raise self.wrong(where, f"there is no file {path}")
            phantom = load_phantom(path or expectation.phantom)
            if own and phantom.name in shipped:
                raise self.wrong(where, f"the name {phantom.name!r} is that of a shipped phantom: rename your file")
            if paths.setdefault(phantom.name, path) != path:
                raise self.wrong(where, f"another file of the name {phantom.name!r} is expected as well: rename one")
            found[phantom.name] = phantom
            named.append(expectation.model_copy(update={"phantom": phantom.name}))
        return found, paths, tuple(named)

    def known(self, where: tuple[str | int, ...], patterns: Iterable[str], names: list[str]) -> None:
        """Check that every pattern means at least one thing that there is."""
        for pattern in patterns:
            if pattern != "*" and not any(fnmatchcase(name, pattern) for name in names):
                raise self.wrong(where, f"there is no {where[-1]} {pattern!r}: {did_you_mean(pattern, names)}")


def _said(problem: Any, where: tuple[str | int, ...]) -> str:  # noqa: ANN401 - pydantic's ErrorDetails
    kind, given, context = problem["type"], problem.get("input"), problem.get("ctx", {})
    if kind == "extra_forbidden":
        return f"there is no such key: {did_you_mean(str(where[-1]), _allowed(where))}"
    if kind == "missing":
        return "is missing"
    if kind in {"value_error", "assertion_error"}:
        return str(context.get("error", problem["msg"]))
    if kind == "too_short":
        return "is empty: at least one is needed"
    said = problem["msg"][0].lower() + problem["msg"][1:]
    plain = {
        "greater_than": f"must be above {context.get('gt')}",
        "greater_than_equal": f"must be at least {context.get('ge')}",
        "less_than_equal": f"must be at most {context.get('le')}",
        "literal_error": f"must be {context.get('expected')}",
        "string_too_short": "must not be empty",
        "string_type": "must be a text in quotation marks",
        "float_type": "must be a number without quotation marks",
        "int_type": "must be a whole number without quotation marks",
        "int_from_float": "must be a whole number",
        "bool_type": "must be true or false",
        "finite_number": "must be a finite number",
    }.get(kind, said)
    if kind.startswith("date"):
        plain = "must be a date such as 2026-11-23, without quotation marks"
    return f"{plain}, found {given!r}" if not isinstance(given, (dict, list)) else f"{plain}, found a table or list"


def _allowed(where: tuple[str | int, ...]) -> list[str]:
    keys = [part for part in where if isinstance(part, str)]
    model = _NESTED.get((keys[0], keys[1])) if len(keys) > 2 else _TABLES.get(keys[0])
    if model is None:
        return list(_TABLES)
    return [field.alias or name for name, field in model.model_fields.items()]


_HEAD = re.compile(r"^\s*\[\[?\s*\"?([^\]\"]+?)\"?\s*\]\]?\s*(#.*)?$")
_KEY = re.compile(r"^\s*\"?([A-Za-z0-9_-]+)\"?\s*[=.]")


def _table_lines(text: str) -> Iterator[tuple[str, int, dict[str, int]]]:
    """Yield every table's name, the line of its head and the lines of its keys; close enough for a hint to a person."""
    name, line, keys = "", 0, dict[str, int]()
    for number, content in enumerate(text.splitlines(), start=1):
        if head := _HEAD.match(content):
            if name:
                yield name, line, keys
            name, line, keys = head[1], number, {}
        elif key := _KEY.match(content):
            keys.setdefault(key[1], number)
    if name:
        yield name, line, keys
