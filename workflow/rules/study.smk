# The study that this run works on: its files, the identities of its images, its lock.

import atexit
import os
import sys
from pathlib import Path

sys.path.insert(0, str(Path(workflow.basedir) / "scripts"))

from evenblur.errors import InputError
from evenblur.measuring_cache import ENVIRONMENT_KEY, chosen_cache
from evenblur.study import decision_tasks
from evenblur.runlock import StudyLockedError, only_looks, release_lock, take_lock
from evenblur.study.gathering import Parts
from evenblur.study.history_tasks import Chronicle
from evenblur.study.ledger import Ledger
from evenblur.study.parts import parts_wanted
from evenblur.study.provenance import PROVENANCE, keep_provenance
from evenblur.study.reading import load_study
from evenblur.study.resources import Demands
from evenblur.study.sites import check_plan_serves, site_files, sites_wanted
from evenblur.study.tasks import Tasks

PY = sys.executable
PROGRAM = Path(workflow.basedir)
STUDY_DIR = Path.cwd()


def refuse(error):
    """Say in plain lines what has to be mended, and end."""
    print(error, file=sys.stderr)
    sys.exit(2)


try:
    STUDY = load_study(STUDY_DIR)
    PART_SIZE = parts_wanted(config)
    SITES = sites_wanted(config, (row.site for row in STUDY.setups))
    if workflow.is_main_process:
        asked = workflow.workflow_settings.cache
        os.environ[ENVIRONMENT_KEY] = chosen_cache(asked, os.environ.get("SNAKEMAKE_OUTPUT_CACHE"))
        if asked:
            # Snakemake's own cache leaves links that point out of the study, open to all: the step keeps copies.
            workflow.workflow_settings.cache = []
    if workflow.is_main_process and not only_looks(sys.argv[1:]):
        take_lock(STUDY_DIR)
        atexit.register(release_lock, STUDY_DIR)
except (InputError, StudyLockedError) as error:
    refuse(error)

PHANTOM_CACHE = os.environ.get(ENVIRONMENT_KEY, "")
LEDGER = Ledger(STUDY_DIR, look=workflow.is_main_process)
TASKS = Tasks(STUDY, LEDGER, STUDY_DIR, PROGRAM)
LAYOUT = TASKS.layout
DEMANDS = Demands(TASKS)
PARTS = Parts(TASKS, PART_SIZE)
if workflow.is_main_process:
    TASKS.look_at_images()
    if keep_provenance(STUDY_DIR, LAYOUT.results):
        print(
            "Snakemake's records of how the results were made are gone, and nothing shows that the results are current:"
            " everything is made again.",
            file=sys.stderr,
        )


# Labels and keys never hold a slash or a dot, so that each path has one meaning.
wildcard_constraints:
    group="scans|phantoms",
    key="[A-Za-z0-9_-]+",
    part="p[01]*",
    period=r"[A-Za-z0-9-]+\.[A-Za-z0-9-]+",
    phantom="[A-Za-z0-9-]+",
    setup="[A-Za-z0-9-]+",
    phantom_session="[A-Za-z0-9-]+",
    subject="[A-Za-z0-9]+",
    session="[A-Za-z0-9]+",
    entities="[A-Za-z0-9_-]+",
