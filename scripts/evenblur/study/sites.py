"""Runs that are about some sites only: which sites, what of the study is theirs, whether the plan serves.

A very large study is smoothed site by site once its plan is made: such a run looks at the scans of its sites alone,
takes the plan as it stands, and leaves the audit to a run of the whole study.
"""

from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

from evenblur.errors import InputError
from evenblur.study.periods import is_proved
from evenblur.study.problems import nearest
from evenblur.study.tasks import Tasks

SITE_KEY = "site"


def sites_wanted(config: Mapping[str, Any], sites: Iterable[str]) -> list[str]:
    """Sites that a partial run is about, sorted; none where it is about the whole study.

    Parameters
    ----------
    config
        The configuration of the run: `site` names one site, or several with commas between.
    sites
        The sites that the study has.

    Raises
    ------
    InputError
        If the study has no such site.

    >>> sites_wanted({"site": "quay,mill"}, ["mill", "moor", "quay"])
    ['mill', 'quay']
    """
    known = set(sites)
    given = [name.strip() for name in str(config.get(SITE_KEY) or "").split(",") if name.strip()]
    for name in given:
        if name not in known:
            raise InputError(f"--config {SITE_KEY}={name}", "the study has no such site", nearest(name, known))
    return sorted(set(given))


def site_files(tasks: Tasks, plan_file: str, sites: Iterable[str]) -> list[str]:
    """Harmonised images, records and achieved records of these sites, or of the whole study where none is named."""
    chosen, by_setup, layout = set(sites), tasks.study.by_setup, tasks.layout

    def wanted(setup: str) -> bool:
        return not chosen or (setup in by_setup and by_setup[setup].site in chosen)

    rows = [row for row in tasks.accepted(plan_file) if wanted(row.setup)]
    periods = [period for period in tasks.plan(plan_file)["periods"] if is_proved(period) and wanted(period["setup"])]
    files = [path for row in rows for path in (layout.harmonised_image(row), layout.scan_record(row))]
    return files + [layout.achieved(period["setup"], period["phantom_session"]) for period in periods]


def check_plan_serves(tasks: Tasks, plan_file: str, sites: Iterable[str]) -> None:
    """See that the plan was made from the rows and images that these sites' scans now have.

    Raises
    ------
    InputError
        If there is no plan, or it knows another state of a scan.
    """
    chosen = set(sites)
    if not Path(plan_file).is_file():
        raise InputError(plan_file, "the plan is missing", "run the target `plan` before a single site")
    planned = {scan["entities"]: scan for scan in tasks.plan(plan_file)["scans"]}
    for key, row in tasks.scans.items():
        if tasks.study.by_setup[row.setup].site not in chosen:
            continue
        entry = planned.get(key, {})
        now = tasks.digest(row.image)
        if entry.get("setup") != row.setup or (now is not None and (entry.get("sha256") or now) != now):
            raise InputError(plan_file, f"was made before {key} came or changed", "run the target `plan` again")
