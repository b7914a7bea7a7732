"""What a scanner's report costs: five years of 14 quantities, against WeasyPrint on the same page without its pictures."""

import argparse
import re
import resource
import runpy
import time
from collections.abc import Callable
from pathlib import Path

from qa.report.render import fill_template, to_pdf
from qa.report.scanner import lay_out_scanner, render_scanner_report


def best_of(times: int, task: Callable[[], object]) -> float:
    """Least processor time of several runs, in seconds: the run that the machine disturbed least."""
    best = float("inf")
    for _ in range(times):
        start = time.process_time()
        task()
        best = min(best, time.process_time() - start)
    return best


def main() -> None:
    """Print seconds, their ratio, the size of the file and the peak of memory."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--weeks", type=int, default=260)
    parser.add_argument("--repeats", type=int, default=3)
    options = parser.parse_args()
    invented = runpy.run_path(str(Path(__file__).parents[1] / "report" / "conftest.py"))
    content = invented["make_rich"](options.weeks)
    page, _, _ = lay_out_scanner(content)
    bare = re.sub(r"<img[^>]*>", "", fill_template("scanner.html", page=page))
    without = best_of(options.repeats, lambda: to_pdf(bare, {}, bytes(16), "@page { size: A4 }"))
    whole = best_of(options.repeats, lambda: render_scanner_report(content))
    pdf = render_scanner_report(content)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"{options.weeks} weeks, {len(page.trends)} quantities")
    print(f"WeasyPrint, the same page without pictures  {without:6.2f} s")
    print(f"the report                                  {whole:6.2f} s, ratio {whole / without:.2f} (bar 2.5)")
    print(f"file {len(pdf) / 1e6:.2f} MB (bar 3), peak memory {peak:.0f} MB (bar 700)")


if __name__ == "__main__":
    main()
