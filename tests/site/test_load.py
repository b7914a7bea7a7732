import json
import re
from datetime import date

import pytest

from qa.errors import ExitStatus, SiteError
from qa.phantoms import phantom_names
from qa.site import load_site, write_site_template
from qa.site.tables import check_name


def test_the_worked_example_is_right(tmp_path):
    path = write_site_template(tmp_path / "department")
    site = load_site(path.parent)
    assert [s.name for s in site.scanners] == ["north-3t", "south-15t"]
    assert [s.every_days for s in site.scanners] == [7, 7]
    assert site.department.zone.key == "Europe/London"
    assert site.expectations[0].settings["pixel_mm"] == (0.98, 0.98)
    assert site.record_url == f"sqlite:///{(tmp_path / 'department' / 'evenfield.db').resolve()}"
    for name in ("inbox", "archive", "refused", "reports"):
        assert (path.parent / name).is_dir()
        assert getattr(site, name) == path.parent / name


def test_every_line_of_the_worked_example_that_is_commented_out_is_right_too(tmp_path):
    path = write_site_template(tmp_path)
    lines = path.read_text("utf-8").splitlines()
    settings = [line.removeprefix("# ") if re.match(r"# (\w+ = |\[)", line) else line for line in lines]
    skipped = ("quantity = [", "off = ", 'scanner = "north-3t"  ', "field_strength_T = 3.0   ", "lower = 85.0")
    text = "\n".join(line for line in settings if not line.startswith(skipped))
    path.write_text(text, encoding="utf-8")
    site = load_site(tmp_path)
    assert site.mail is not None
    assert site.mail.to == ("physics@saltmarsh.example",)
    assert site.downtimes[0].covers(date(2026, 3, 6))
    assert not site.downtimes[0].covers(date(2026, 3, 7))
    assert site.downtimes_of("south-15t") == ((date(2026, 3, 2), date(2026, 3, 6)),)
    assert site.downtimes_of("north-3t") == ()
    assert site.charts.baseline_sessions == 10
    assert site.charts.chosen() == {"nelson": (1,), "ewma": True}


def test_the_example_of_the_interface_is_right(tmp_path):
    (tmp_path / "site.toml").write_text(
        """
[department]
name = "Saltmarsh Imaging"            # invented
timezone = "Europe/London"
[record]
url = "sqlite:///evenfield.db"
[[scanner]]
name = "north-3t"
match = { station = "NORTH3T" }
field_strength_T = 3.0
every_days = 7
grace_days = 2
[[expect]]
scanner = "north-3t"
phantom = "sphere-170"
series = "QA sphere*"
patient_id = "QA-*"
settings = { repetition_ms = 500, echo_ms = 20, slice_thickness_mm = 5.0, pixel_mm = 0.98 }
[[limit]]
quantity = "ghosting"
scanner = "*"
upper = 2.5
rule = "simple"
source = "..."
[[limit]]
quantity = "snr"
phantom = "sphere-170"
lower_percent_of_baseline = 90
warn_percent_of_baseline = 95
[mail]
to = ["physics@saltmarsh.example"]
host = "localhost"
""",
        encoding="utf-8",
    )
    site = load_site(tmp_path)
    own = [limit for limit in site.limits if not limit.shipped]
    assert [(o.quantity, o.upper, o.lower_percent_of_baseline, o.warn_percent_of_baseline) for o in own] == [
        ("ghosting", 2.5, None, None),
        ("snr", None, 90.0, 95.0),
    ]


def test_a_byte_order_mark_is_no_matter(folder):
    folder.load()
    path = folder.path / "site.toml"
    path.write_bytes(b"\xef\xbb\xbf" + path.read_bytes())
    assert load_site(folder.path).department.name == "Saltmarsh Imaging"


WRONG = [
    # what is added, what is replaced, the parts of the sentence
    ("[[scaner]]\nname = 'x'\n", None, ("[scaner]", "did you mean 'scanner'?")),
    ("[[limit]]\nquantity = 'ghosting'\nuper = 2.5\n", None, ("line 23", "[[limit]] number 1, uper", "did you mean 'upper'?")),
    (
        "[[limit]]\nquantity = 'ghostng'\nupper = 2.5\n",
        None,
        ("line 22", "unknown quantity 'ghostng'", "did you mean 'ghosting'?", "snr"),
    ),
    ("[[limit]]\nquantity = ['snr', 'nsr']\nlower = 2.5\n", None, ("quantity", "unknown quantity 'nsr'")),
    ("[[limit]]\nquantity = []\nlower = 2.5\n", None, ("quantity: is empty",)),
    ("[[limit]]\nquantity = 'snr'\nlower = 9\nupper = 5\n", None, ("[[limit]] number 1", "lower 9 lies above upper 5")),
    ("[[limit]]\nquantity = 'snr'\nlower = 9\nwarn_lower = 8\n", None, ("lower 9 lies above warn_lower 8",)),
    ("[[limit]]\nquantity = 'snr'\nlower = nan\n", None, ("lower", "finite")),
    ("[[limit]]\nquantity = 'snr'\nlower = '90'\n", None, ("lower", "must be a number without quotation marks, found '90'")),
    ("[[limit]]\nquantity = 'snr'\nlower = true\n", None, ("lower", "must be a number", "True")),
    ("[[limit]]\nquantity = 'snr'\n", None, ("sets no bound", "lower_percent_of_baseline")),
    ("[[limit]]\nquantity = 'snr'\noff = true\nlower = 3\n", None, ("off = true leaves no room",)),
    ("[[limit]]\nquantity = 'length_0'\nnominal = 190\nlower = 3\n", None, ("nominal needs plus_minus beside it",)),
    (
        "[[limit]]\nquantity = 'length_0'\nplus_minus = 1\nwarn_plus_minus = 2\n",
        None,
        ("warn_plus_minus 2 lies above plus_minus 1",),
    ),
    ("[[limit]]\nquantity = 'snr'\nupper = 5\nwarn_lower = 8\n", None, ("warn_lower 8 lies above upper 5",)),
    (
        "[[limit]]\nquantity = 'snr'\nupper = 5\nfield_strength_T = 3\nfield_strength_below_T = 3\n",
        None,
        ("exclude each other",),
    ),
    (
        "[[limit]]\nquantity = 'snr'\nlower_percent_of_baseline = 90\nwarn_percent_of_baseline = 80\n",
        None,
        ("lower_percent_of_baseline 90 lies above warn_percent_of_baseline 80",),
    ),
    ("[[limit]]\nquantity = 'length_0'\nnominal = 190\nplus_minus = 2\nupper = 187\n", None, ("upper 187", "nominal")),
    ("[[limit]]\nquantity = 'length_0'\nnominal = 190\nplus_minus = -2\n", None, ("above",)),
    (
        "[[limit]]\nquantity = 'snr'\nlower = 3\nrule = 'strict'\n",
        None,
        ("rule", "must be 'simple' or 'guarded', found 'strict'"),
    ),
    ("[[limit]]\nquantity = 'snr'\nlower = 3\nscanner = 'norht-3t'\n", None, ("scanner", "did you mean 'north-3t'?")),
    ("[[limit]]\nquantity = 'snr'\nlower = 3\nphantom = 'sphere-17'\n", None, ("phantom", "did you mean 'sphere-170'?")),
    ("[[limit]]\nquantity = 'snr'\nlower = 3\ncoil = 'HEAD[1'\n", None, ("coil", "bracket")),
    ("[[limit]]\nquantity = 'snr'\nlower = 3\nshipped = true\n", None, ("shipped", "there is no such key")),
    (
        "[[limit]]\nquantity = 'snr'\nlower = 3\n[[limit]]\nquantity = 'snr'\nlower = 4\n",
        None,
        ("number 2", "contradicts [[limit]] number 1"),
    ),
    ("[[limit]]\nquantity = ['snr', 'snr']\nlower = 3\n", None, ("repeats",)),
    ("[limit]\nquantity = 'snr'\nlower = 3\n", None, ("two brackets, [[limit]]",)),
    ("[[mail]]\nto = 'a@b.example'\nhost = 'x'\n", None, ("one bracket, [mail]",)),
    ("[mail]\nto = 'physics'\nhost = 'localhost'\n", None, ("[mail], to", "'physics' is not a mail address")),
    ("[mail]\nto = []\nhost = 'localhost'\n", None, ("[mail], to", "at least one")),
    ("[mail]\nto = ['a@b.example']\n", None, ("[mail], host: is missing",)),
    ("[report]\npage = 'A3'\n", None, ("[report], page", "'A4' or 'Letter'", "'A3'")),
    ("[charts]\nnelson = [9]\n", None, ("[charts], nelson", "at most 8, found 9")),
    ("[charts]\newma = 1\n", None, ("[charts], ewma", "true or false")),
    ("[record]\nurl = 'mysql://x/y'\n", None, ("[record]", "sqlite:///")),
    ("[record]\nurl = 'sqlite://'\n", None, ("[record]", "memory")),
    (
        "[[downtime]]\nscanner = 'north-3t'\nfrom = 2026-03-06\nto = 2026-03-02\nreason = 'x'\n",
        None,
        ("[[downtime]] number 1", "before"),
    ),
    (
        "[[downtime]]\nscanner = 'north-3t'\nfrom = 'March'\nreason = 'x'\n",
        None,
        ("from", "must be a date such as 2026-11-23"),
    ),
    ("[[downtime]]\nscanner = 'nroth-3t'\nfrom = 2026-03-02\nreason = 'x'\n", None, ("did you mean 'north-3t'?",)),
    ("", ("Europe/London", "Europe/Lodnon"), ("line 3: [department], timezone", "unknown time zone 'Europe/Lodnon'")),
    ("", ("Europe/London", "../../etc"), ("unknown time zone",)),
    ("", ('"south-15t"', '"north-3t"'), ("[[scanner]] number 2, name", "number 1 too")),
    ("", ('"south-15t"', '"North-3T"'), ("number 1 too",)),
    ("", ('{ station = "SOUTH15T", serial = "S-77" }', '{ station = "north3t " }'), ("match", "could not tell them apart")),
    ("", ('{ station = "NORTH3T" }', "{}"), ("[[scanner]] number 1, match", "station, serial or both")),
    ("", ('{ station = "NORTH3T" }', '{ sttion = "NORTH3T" }'), ("match.sttion", "did you mean 'station'?")),
    ("", ("field_strength_T = 3.0", "field_strength_T = -3.0"), ("field_strength_T", "must be above 0", "-3.0")),
    ("", ("field_strength_T = 3.0", "every_days = 1.5"), ("field_strength_T: is missing",)),
    ("", ("field_strength_T = 3.0", "field_strength_T = 3.0\nevery_days = 1.5"), ("every_days", "whole number", "1.5")),
    ("", ("field_strength_T = 3.0", "field_strength_T = 3.0\nevery_days = 0"), ("every_days", "at least 1")),
    ("", ('"north-3t"', '"../north"'), ("name", "allowed are letters, digits, '-' and '_'")),
    ("", ('phantom = "sphere-170"', 'phantom = "sphere-171"'), ("[[expect]] number 1, phantom", "did you mean 'sphere-170'?")),
    ("", ('phantom = "sphere-170"', 'phantom = "own.toml"'), ("phantom", "there is no file", "own.toml")),
    ("", ('patient_id = "QA-*"', 'patient_id = "*"'), ("patient_id", "would take patients' images")),
    ("", ('patient_id = "QA-*"\n', ""), ("patient_id: is missing",)),
    ("", ("repetition_ms = 500", "repetitions_ms = 500"), ("settings", "did you mean 'repetition_ms'?")),
    ("", ("repetition_ms = 500", "repetition_ms = '500'"), ("settings", "repetition_ms: must be a number")),
    ("", ("pixel_mm = 0.98", "pixel_mm = [1, 2, 3]"), ("settings", "pixel_mm", "two numbers")),
    ("", ('series = "QA sphere*"', 'series = "QA [sphere"'), ("series", "bracket")),
    ("", ('name = "Saltmarsh Imaging"', "name = Saltmarsh"), ("is not valid TOML", "line 2")),
    ("", ('name = "Saltmarsh Imaging"', 'name = ""'), ("[department], name", "must not be empty")),
    ("", ('[department]\nname = "Saltmarsh Imaging"\ntimezone = "Europe/London"\n', ""), ("[department] is missing",)),
]


@pytest.mark.parametrize(("addition", "replace", "parts"), WRONG)
def test_a_mistake_is_one_sentence_that_names_the_place(folder, addition, replace, parts):
    with pytest.raises(SiteError) as caught:
        folder.load(addition, replace=replace)
    said = str(caught.value)
    assert said.startswith(str(folder.path / "site.toml"))
    for part in parts:
        assert part in said
    assert said.endswith(".")
    assert "\n" not in said
    assert caught.value.exit_status is ExitStatus.WRONG_COMMAND


def test_a_missing_file_says_how_to_start_one(tmp_path):
    with pytest.raises(SiteError, match="run 'evenfield init"):
        load_site(tmp_path / "nowhere")


def test_a_folder_in_place_of_the_file(tmp_path):
    (tmp_path / "site.toml").mkdir()
    with pytest.raises(SiteError, match="cannot be read"):
        load_site(tmp_path)


def test_another_encoding_names_the_line(folder):
    folder.load()
    path = folder.path / "site.toml"
    path.write_bytes(path.read_bytes().replace(b"Saltmarsh Imaging", "Salzhäuser".encode("latin-1")))
    with pytest.raises(SiteError, match="line 2: is not UTF-8"):
        load_site(folder.path)


def test_deep_nesting_ends_in_a_sentence(folder):
    with pytest.raises(SiteError, match="not valid TOML"):
        folder.load("x = " + "[" * 100_000 + "\n")


@pytest.mark.parametrize("name", ["north-3t", "MR_2", "βόρειος", "北3T", "شمال", "7t"])
def test_names_of_any_script_serve(name):
    assert check_name(name) == name


@pytest.mark.parametrize(
    "name", ["", "-x", ".x", "a/b", "a\\b", "a b", "a:b", "a\0b", "..", "con", "LPT1", "fleet", "x" * 81, "_x"]
)
def test_names_that_no_file_could_bear(name):
    with pytest.raises(ValueError, match="name"):
        check_name(name)


def test_composed_and_decomposed_spellings_are_one_name():
    assert check_name("süd") == "süd"


def test_a_phantom_of_the_departments_own(folder, tmp_path):
    (tmp_path / "our-ball.toml").write_text(
        '[about]\ntitle="Ball"\nsource="drawing 7"\ncautions="none"\n[body]\nshape="sphere"\ndiameter_mm=160.0\n'
    )
    site = folder.load(
        "[[limit]]\nquantity='length_0'\nphantom='our-ball'\nnominal=160\nplus_minus=1\n",
        replace=('phantom = "sphere-170"', 'phantom = "our-ball.toml"'),
    )
    assert site.expectations[0].phantom == "our-ball"
    assert site.phantoms["our-ball"].body.diameter_mm == 160.0
    assert (site.limits[0].nominal, site.limits[0].plus_minus) == (160.0, 1.0)


def test_a_phantom_file_may_not_take_a_shipped_name(folder, tmp_path):
    (tmp_path / "sphere-any.toml").write_text('[about]\ntitle="b"\nsource="s"\ncautions="c"\n[body]\nshape="sphere"\n')
    with pytest.raises(SiteError, match="shipped phantom"):
        folder.load(replace=('phantom = "sphere-170"', 'phantom = "sphere-any.toml"'))


def test_a_postgresql_url_gets_its_driver(folder):
    assert folder.load("[record]\nurl='postgresql://u@h/d'\n").record_url == "postgresql+psycopg://u@h/d"


def test_an_unknown_scanner_is_named(folder):
    site = folder.load()
    assert site.scanner("north-3t").field_strength_T == 3.0
    with pytest.raises(SiteError, match="did you mean 'north-3t'"):
        site.scanner("north")


def test_the_hash_of_the_limits_changes_with_them_and_with_nothing_else(folder):
    plain = folder.load()
    again = folder.load("[report]\npage='Letter'\n")
    changed = folder.load("[[limit]]\nquantity='snr'\nlower=90\n")
    assert plain.limits_sha256 == again.limits_sha256
    assert plain.limits_sha256 != changed.limits_sha256
    assert json.loads(changed.limits_json)[0]["lower"] == 90.0
    assert set(plain.phantoms) <= set(phantom_names())
