"""What the steps ask of the computer covers what they take on the demonstration's images."""

import json
import re
import shutil
import subprocess
import sys

import pytest

import small_study as small
from evenblur.images.extent import image_extent
from evenblur.study.reading import load_study
from evenblur.study.resources import COSTS, DEMONSTRATION_IMAGE, declared

pytestmark = pytest.mark.slow

# A small launcher: the peak of a child counts what its parent held when it split off.
LAUNCH = """
import os, subprocess, sys, time
begin = time.perf_counter()
_, status, usage = os.wait4(subprocess.Popen(sys.argv[1:], stdout=subprocess.DEVNULL).pid, 0)
unit = 1 if sys.platform == "darwin" else 1024
print(usage.ru_maxrss * unit / 1e6, time.perf_counter() - begin, status)
"""


@pytest.fixture(scope="module")
def demonstration(tmp_path_factory):
    """The demonstration's images, without a run of the study."""
    study_dir = tmp_path_factory.mktemp("demonstration") / "study"
    shutil.copytree(small.PROGRAM / "config", study_dir / "config")
    command = [sys.executable, small.PROGRAM / "scripts/make_demonstration.py", "--study-dir", study_dir]
    subprocess.run(command, check=True, capture_output=True)
    return study_dir


def cost(study_dir, step, *arguments):
    """Peak MB and minutes of one step command."""
    command = [sys.executable, "-S", "-c", LAUNCH, sys.executable, small.PROGRAM / f"scripts/{step}.py", *arguments]
    done = subprocess.run([str(word) for word in command], check=True, capture_output=True, text=True, cwd=study_dir)
    memory, seconds, status = done.stdout.split()
    assert status == "0", done.stderr
    return float(memory), float(seconds) / 60


def largest(study_dir, rows):
    return max(rows, key=lambda row: image_extent(study_dir / row.image).voxels if row.use == "yes" else 0)


def covers(step, extent, found):
    asked = declared(step, voxels=extent.voxels, frames=extent.frames)
    return found[0] <= asked["mem_mb"] and found[1] <= asked["runtime"]


def test_the_largest_scan_takes_no_more_than_is_asked_for(demonstration, tmp_path):
    rows = [row for row in load_study(demonstration).scans if (demonstration / row.image).exists()]
    scan = largest(demonstration, rows)
    extent = image_extent(demonstration / scan.image)
    intake = cost(demonstration, "take_in_image", "--image", scan.image, "--record", tmp_path / "i.json")
    assert covers("take_in_image", extent, intake)
    widths = ("--in-plane-mm", 5.5, "--axial-mm", 5)
    out = ("--out", tmp_path / "h.nii.gz", "--record", tmp_path / "h.json")
    assert covers("smooth_scan", extent, cost(demonstration, "smooth_scan", "--image", scan.image, *widths, *out))


@pytest.mark.parametrize("kind", ["uniform_cylinder", "point_source"])
def test_the_largest_phantom_takes_no_more_than_is_asked_for(demonstration, tmp_path, kind):
    phantom = largest(demonstration, [row for row in load_study(demonstration).phantoms if row.kind == kind])
    given = ("--kind", kind, "--image", phantom.image, "--details-text", json.dumps(phantom.details))
    found = cost(demonstration, "measure_resolution", *given, "--out", tmp_path / "r.json")
    assert covers("measure_resolution", image_extent(demonstration / phantom.image), found)


def test_the_bound_for_images_that_are_yet_to_be_made_holds(demonstration):
    study = load_study(demonstration)
    made = [demonstration / row.image for row in [*study.scans, *study.phantoms]]
    extents = [image_extent(path) for path in made if path.exists()]
    assert len(extents) > 20
    assert max(extent.voxels for extent in extents) <= DEMONSTRATION_IMAGE.voxels
    assert max(extent.frames for extent in extents) <= DEMONSTRATION_IMAGE.frames


def test_every_step_that_works_on_images_asks_for_memory_time_and_one_thread():
    asking = {}
    for path in (small.PROGRAM / "workflow" / "rules").glob("*.smk"):
        rules = re.findall(r"^ *rule (\w+):\n(.*?)(?=^ *rule |\Z)", path.read_text(), re.DOTALL | re.MULTILINE)
        for name, body in rules:
            asking[name] = all(word in body for word in ("threads: 1\n", "mem_mb=", "runtime="))
    assert {*COSTS, "gather_intake", "gather_records"} <= {name for name, asks in asking.items() if asks}
