"""Commissioning: digital scans of known truth, measured on this machine, error and stated uncertainty side by side.

`cases` draws one scan and measures it, `bars` is the table of what is promised, `limits` what noise allows any method, `tally`
adds the cases up, `run` does so for many phantoms on all cores.
"""

from qa.commission.cases import Measurer, run_case
from qa.commission.evidence import check_target, write_evidence
from qa.commission.run import commission, run_commission
from qa.report.commission_content import CampaignResult, Case, CommissionResult, Figure, Tally

__all__ = [
    "CampaignResult",
    "Case",
    "CommissionResult",
    "Figure",
    "Measurer",
    "Tally",
    "check_target",
    "commission",
    "run_case",
    "run_commission",
    "write_evidence",
]
