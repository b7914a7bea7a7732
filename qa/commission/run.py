"""The campaign: many cases of each phantom, on as many cores as there are."""

import os
import platform
from collections.abc import Callable, Iterable, Iterator, Sequence
from importlib.metadata import version
from pathlib import Path
from typing import Any

from qa.commission.bars import BAR_CASES
from qa.commission.cases import Measurer, locate_and_measure, run_case
from qa.commission.tally import tally_cases
from qa.errors import UsageError
from qa.phantoms import Phantom, load_phantom, phantom_names
from qa.report.commission_content import CampaignResult, Case, CommissionResult
from qa.version import __version__

__all__ = ["commission", "machine_facts", "run_commission"]

Progress = Callable[[Sequence[Any], str], Iterable[Any]]
_BATCH = 2


def commission(
    phantoms: Iterable[str | Path | Phantom],
    cases: int,
    seed: int = 0,
    jobs: int | None = None,
    progress: Progress | None = None,
    *,
    measurer: Measurer = locate_and_measure,
) -> CommissionResult:
    """Measure digital scans of known truth and hold every figure against it.

    Parameters
    ----------
    phantoms : iterable of str, pathlib.Path or Phantom
        Names of shipped phantoms, paths of definitions, or definitions.
    cases : int
        How many scans of each.
    seed : int
        Seed of the first case; the others follow one by one. One seed reproduces its case by itself.
    jobs : int, optional
        Processes to run on; all cores where not given. The figures are the same to the last bit on any number.
    progress : callable, optional
        Takes a sequence and a title, and yields its items while a bar grows.
    measurer : callable, optional
        What is put to the test; the program's own routines.

    Returns
    -------
    CommissionResult
        All cases, and what they add up to.

    Raises
    ------
    UsageError
        A number of cases or processes below 1, a negative seed.
    PhantomError
        There is no such phantom, or its definition is wrong.
    """
    if cases < 1:
        raise UsageError(f"cases is {cases}: it must be at least 1.")
    if seed < 0:
        raise UsageError(f"seed is {seed}: it must not be negative.")
    if jobs is not None and jobs < 1:
        raise UsageError(f"jobs is {jobs}: it must be at least 1.")
    definitions = _once_each([one if isinstance(one, Phantom) else load_phantom(one) for one in phantoms])
    seeds = range(seed, seed + cases)
    tasks = [(phantom, number) for phantom in definitions for number in seeds]
    done: dict[str, list[Case]] = {phantom.name: [] for phantom in definitions}
    results = _run(tasks, measurer, min(jobs or os.cpu_count() or 1, len(tasks)))
    for _, case in zip(tasks if progress is None else progress(tasks, "Measuring digital scans"), results, strict=True):
        done[case.phantom].append(case)
    campaigns = tuple(
        CampaignResult(
            phantom=phantom.name,
            phantom_sha256=phantom.sha256,
            first_seed=seed,
            cases=tuple(done[phantom.name]),
            tallies=tally_cases(done[phantom.name]),
        )
        for phantom in definitions
    )
    return CommissionResult(software_version=__version__, machine=machine_facts(), campaigns=campaigns)


def _once_each(phantoms: Sequence[Phantom]) -> list[Phantom]:
    held: dict[str, Phantom] = {}
    for phantom in phantoms:
        if held.setdefault(phantom.name, phantom).sha256 != phantom.sha256:
            raise UsageError(f"two phantoms are called {phantom.name} and differ: give one of the files another name.")
    if not held:
        raise UsageError("phantoms is empty: name at least one.")
    return list(held.values())


def _run(tasks: Sequence[tuple[Phantom, int]], measurer: Measurer, jobs: int) -> Iterator[Case]:
    """Yield the cases in order. Each runs on one thread, so that sums are added up in the same order everywhere."""
    from joblib import Parallel, delayed, parallel_config

    with parallel_config(backend="loky", inner_max_num_threads=1):
        pool = Parallel(n_jobs=jobs, return_as="generator", batch_size=_BATCH)
        yield from pool(delayed(_on_one_thread)(phantom, seed, measurer) for phantom, seed in tasks)


def _on_one_thread(phantom: Phantom, seed: int, measurer: Measurer) -> Case:
    from threadpoolctl import threadpool_limits

    with threadpool_limits(limits=1):
        return run_case(phantom, seed, measurer)


def machine_facts() -> dict[str, str]:
    """Say what computes here, as far as figures may depend on it; no name of a computer or person."""
    return {
        "Python": f"{platform.python_version()} ({platform.python_implementation()})",
        "numpy": version("numpy"),
        "scipy": version("scipy"),
        "on": f"{platform.system()}, {platform.machine()}",
    }


def run_commission(
    phantoms: Sequence[str] | None, cases: int | None, seed: int | None, jobs: int | None, progress: Progress | None
) -> CommissionResult:
    """Run what the command line asks for; what it leaves out is all shipped phantoms, and 200 cases or the one of a seed."""
    if cases is None:
        cases = BAR_CASES if seed is None else 1
    return commission(phantoms or phantom_names(), cases, seed or 0, jobs, progress)
