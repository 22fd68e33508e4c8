"""Settings of the whole test suite."""

import os
from pathlib import Path

import hypothesis
import pytest

# Before any test imports numpy or numba; test processes inherit it.
for _name in ("NUMBA_NUM_THREADS", "OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")
os.environ.setdefault("MPLBACKEND", "Agg")

# Derandomised: the same examples in every run, so that a failure is never a matter of luck.
hypothesis.settings.register_profile("quick", max_examples=200, derandomize=True, deadline=None)
hypothesis.settings.load_profile("quick")

PUBLISHED = Path(__file__).parent / "published"


def _is_published(config, node):
    path = config.rootpath / node.nodeid.split("::")[0]
    return path.is_relative_to(PUBLISHED)


def _forbid_skipping(config, node, report):
    """Turn a skip, or a test marked as expected to fail, under tests/published into a failure."""
    expected_to_fail = hasattr(report, "wasxfail")
    if not (report.skipped or expected_to_fail) or not _is_published(config, node):
        return
    if expected_to_fail:
        what, why = "marked xfail", report.wasxfail
        del report.wasxfail
    else:
        what, why = "skipped", report.longrepr[2].removeprefix("Skipped: ")
    report.outcome = "failed"
    report.longrepr = f"tests/published allows no test to be {what}: {why}"


# Outermost, so that pytest's own reading of skip and xfail comes first.
@pytest.hookimpl(wrapper=True, tryfirst=True)
def pytest_runtest_makereport(item, call):
    report = yield
    _forbid_skipping(item.config, item, report)
    return report


@pytest.hookimpl(wrapper=True, tryfirst=True)
def pytest_make_collect_report(collector):
    report = yield
    _forbid_skipping(collector.config, collector, report)
    return report
