"""What all tests share: numerical threads, hypothesis, and the tests that need a component of the system."""

import os
import shutil

import pytest
from hypothesis import HealthCheck, settings

# As in the step commands: before numpy is imported, one thread a process, so that sums do not depend on a thread count.
for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[_name] = "1"

# The same examples at every run, and no failure because a machine is busy.
settings.register_profile(
    "evenblur", derandomize=True, deadline=None, suppress_health_check=[HealthCheck.too_slow], print_blob=True
)
settings.load_profile("evenblur")

NO_SKIP = "EVENBLUR_NO_SKIP"


def chromium_path() -> str | None:
    """The Chromium on the path, under the names that distributions give it."""
    return next(filter(None, map(shutil.which, ("chromium", "chromium-browser", "google-chrome"))), None)


def missing_component(marker: str) -> str | None:
    """The component that tests with this marker need and that the system lacks."""
    if marker == "browser" and (chromium_path() is None or shutil.which("chromedriver") is None):
        return "Chromium with chromedriver"
    if marker == "cluster" and not all(map(shutil.which, ("sbatch", "slurmctld", "slurmd", "munged"))):
        return "Slurm with munge"
    return None


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """Begin with whole scenarios, so that no worker is left with a long file at the end."""
    items.sort(key=lambda item: item.get_closest_marker("slow") is None)


def pytest_runtest_setup(item: pytest.Item) -> None:
    """Leave a test out when its component is missing; where nothing may be left out, fail it."""
    for marker in ("browser", "cluster"):
        if item.get_closest_marker(marker) is None:
            continue
        component = missing_component(marker)
        if component is None:
            continue
        if os.environ.get(NO_SKIP) == "1":
            pytest.fail(f"{component} is missing, and {NO_SKIP}=1 lets no test be left out", pytrace=False)
        pytest.skip(f"missing component: {component}")


def pytest_terminal_summary(terminalreporter: pytest.TerminalReporter) -> None:
    """Say at the end which component was missing and how many tests were left out for it."""
    counts: dict[str, int] = {}
    for report in terminalreporter.stats.get("skipped", []):
        reason = str(report.longrepr[2]) if isinstance(report.longrepr, tuple) else ""
        _, found, component = reason.partition("missing component: ")
        if found:
            counts[component] = counts.get(component, 0) + 1
    for component, count in sorted(counts.items()):
        terminalreporter.write_line(f"Left out: {count} test(s) that need {component}, which this system lacks.")
