from qa.records import Settings
from qa.site import changed_settings, expectation_for, is_phantom_identity, match_scanner

SETTINGS = Settings(repetition_ms=500.4, slice_thickness_mm=5.0, pixel_mm=(0.9765625, 0.9765625), receive_coil="HEAD 8")


def test_a_scanner_is_known_by_all_it_was_given(folder):
    site = folder.load()
    assert match_scanner(site, " north3t ", "anything").name == "north-3t"
    assert match_scanner(site, "SOUTH15T", "s-77").name == "south-15t"
    reason = match_scanner(site, "SOUTH15T", "S-78")
    assert "'SOUTH15T'" in reason
    assert "'S-78'" in reason


def test_the_closest_match_wins(folder):
    site = folder.load('[[scanner]]\nname="spare"\nmatch={station="NORTH3T", serial="9"}\nfield_strength_T=3.0\n')
    assert match_scanner(site, "NORTH3T", "9").name == "spare"
    assert match_scanner(site, "NORTH3T", "8").name == "north-3t"


def test_two_that_agree_equally_are_named(folder):
    site = folder.load('[[scanner]]\nname="spare"\nmatch={serial="9"}\nfield_strength_T=3.0\n')
    assert "north-3t or spare" in match_scanner(site, "NORTH3T", "9")


def test_a_long_header_value_is_cut_short(folder):
    assert len(match_scanner(folder.load(), "x" * 100_000, "y" * 100_000)) < 400


def test_the_identity_comes_first_and_leaves_no_trace(folder):
    site = folder.load()
    scanner = site.scanner("north-3t")
    assert expectation_for(site, scanner, "QA sphere axial", "QA-01 ").phantom == "sphere-170"
    reason = expectation_for(site, scanner, "Head of Jane Invented", "4711-0815")
    assert "'QA-*'" in reason
    for trace in ("4711", "0815", "Jane", "Invented", "Head"):
        assert trace not in reason
    assert is_phantom_identity(site, "QA-7")
    assert not is_phantom_identity(site, "qa-7")
    assert not is_phantom_identity(site, "")


def test_an_unexpected_series_is_named_with_what_was_expected(folder):
    site = folder.load()
    reason = expectation_for(site, site.scanner("north-3t"), "localiser", "QA-01")
    assert "'localiser'" in reason
    assert "'QA sphere*'" in reason


def test_a_scanners_own_expectation_comes_before_that_for_any(folder):
    site = folder.load('[[expect]]\nscanner="north-3t"\nphantom="cylinder-200"\nseries="QA*"\npatient_id="QA-*"\n')
    assert expectation_for(site, site.scanner("north-3t"), "QA sphere", "QA-1").phantom == "cylinder-200"
    assert expectation_for(site, site.scanner("south-15t"), "QA sphere", "QA-1").phantom == "sphere-170"


def test_a_scanner_of_which_nothing_is_expected(folder):
    site = folder.load(replace=('phantom = "sphere-170"', 'scanner = "south-15t"\nphantom = "sphere-170"'))
    assert "expects nothing of north-3t" in expectation_for(site, site.scanner("north-3t"), "QA sphere", "QA-1")


def test_settings_agree_within_their_rounding(folder):
    assert changed_settings(folder.load().expectations[0], SETTINGS) == ()


def test_a_changed_setting_is_a_sentence(folder):
    expectation = folder.load().expectations[0]
    changed = Settings(repetition_ms=600.0, slice_thickness_mm=None, pixel_mm=(0.98, 1.1), receive_coil="BODY")
    assert changed_settings(expectation, changed) == (
        "repetition_ms is 600, expected 500",
        "slice_thickness_mm is not stated, expected 5",
        "pixel_mm is 0.98 x 1.1, expected 0.98 x 0.98",
        "receive_coil is 'BODY', expected 'HEAD*'",
    )
