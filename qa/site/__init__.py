"""site.toml becomes checked records: scanners, expectations, limits, schedule, people."""

from qa.site.limits import limits_json, limits_sha256, parse_limits, shipped_limits
from qa.site.load import FILE_NAME, Site, load_site
from qa.site.matching import changed_settings, expectation_for, is_phantom_identity, match_scanner
from qa.site.tables import Charts, Department, Downtime, Expectation, Mail, Match, ReportSettings, SiteScanner
from qa.site.template import SUBFOLDERS, write_site_template

__all__ = [
    "FILE_NAME",
    "SUBFOLDERS",
    "Charts",
    "Department",
    "Downtime",
    "Expectation",
    "Mail",
    "Match",
    "ReportSettings",
    "Site",
    "SiteScanner",
    "changed_settings",
    "expectation_for",
    "is_phantom_identity",
    "limits_json",
    "limits_sha256",
    "load_site",
    "match_scanner",
    "parse_limits",
    "shipped_limits",
    "write_site_template",
]
