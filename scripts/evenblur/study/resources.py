"""What each step asks of the computer: memory and run time by the size of its images. Every step has one thread.

The figures bound what tests/benchmarks/step_costs.py measured, up to ten million voxels a frame: at most 12 bytes a
voxel for the two steps that read a scan frame by frame, 95 for the steps that measure a phantom, 170 a voxel of image
and reference together for a reference image.
Local steps gather what others wrote and declare nothing.
"""

import math
from dataclasses import dataclass
from typing import Any

from evenblur.images.extent import Extent
from evenblur.study.periods import find_period, proving_phantoms
from evenblur.study.pictured import IN_ALL
from evenblur.study.tasks import Tasks


@dataclass(frozen=True)
class Cost:
    """A step's cost: MB at the start and bytes a voxel of a frame, minutes at the start and seconds a megavoxel."""

    start_mb: int
    bytes_a_voxel: int
    start_min: int
    seconds_a_megavoxel: int


COSTS = {
    "take_in_image": Cost(150, 40, 2, 2),
    "smooth_scan": Cost(150, 40, 2, 2),
    "measure_resolution": Cost(300, 250, 10, 20),
    "match_kernel": Cost(300, 250, 20, 60),
    "measure_achieved": Cost(300, 250, 10, 40),
    "measure_regions": Cost(150, 400, 2, 10),
    "measure_site_effect": Cost(300, 250, 10, 40),
    "make_pictures": Cost(150, 80, 5, 5),
}
"""By step; several times the measured figures, since disks and processors differ."""

DEMONSTRATION_IMAGE = Extent(1_000_000, 6)
"""Bounds the images that the demonstration makes, which are not there yet when the run is laid out."""

LARGEST_MB = 500_000
"""No step asks for more, whatever a header claims."""


def declared(step: str, *, voxels: int, frames: int = 1) -> dict[str, int]:
    """What a step declares: `mem_mb` and `runtime` (minutes).

    Parameters
    ----------
    step
        Name of the step.
    voxels
        Voxels of a frame; of all images together where a step works with several.
    frames
        Number of frames.

    >>> declared("smooth_scan", voxels=2_000_000, frames=30)
    {'mem_mb': 230, 'runtime': 4}
    """
    cost = COSTS[step]
    memory = cost.start_mb + math.ceil(cost.bytes_a_voxel * voxels / 1e6)
    minutes = cost.start_min + math.ceil(cost.seconds_a_megavoxel * voxels * frames / 6e7)
    return {"mem_mb": min(memory, LARGEST_MB), "runtime": minutes}


class Demands:
    """What the jobs of a study ask for.

    Parameters
    ----------
    tasks
        The steps of the study.
    """

    def __init__(self, tasks: Tasks) -> None:
        self._tasks = tasks

    def intake(self, group: str, key: str) -> dict[str, int]:
        """Demand of one image's intake; `group` is `scans` or `phantoms`."""
        row: Any = self._tasks.scans[key] if group == "scans" else self._tasks.phantoms[key]
        return self._of("take_in_image", [row.image])

    def smoothing(self, entities: str) -> dict[str, int]:
        """Demand of one scan's smoothing."""
        return self._of("smooth_scan", [self._tasks.scans[entities].image])

    def resolution(self, phantom: str) -> dict[str, int]:
        """Demand of one phantom's measurement."""
        return self._of("measure_resolution", self._phantom_images([phantom]))

    def period(self, step: str, setup: str, phantom_session: str, plan_file: str) -> dict[str, int]:
        """Demand of `match_kernel` or `measure_achieved` for one period, after the plan."""
        period = find_period(self._tasks.plan(plan_file), setup, phantom_session)
        return self._of(step, self._phantom_images(proving_phantoms(period)))

    def regions(self, entities: str) -> dict[str, int]:
        """Demand of the means of one scan's regions."""
        row = self._tasks.scans[entities]
        return self._of("measure_regions", [row.image, *self._tasks.region_images(row)])

    def site_effect(self) -> dict[str, int]:
        """Demand of the comparison between sites, one phantom after another; known before any plan."""
        used = [row.phantom for row in self._tasks.study.phantoms if row.use == "yes"]
        return self._one_by_one("measure_site_effect", [self._phantom_images([label]) for label in used])

    def pictures(self) -> dict[str, int]:
        """Demand of the report's pictures, a scan and its harmonised image at a time; known before any plan."""
        rows = sorted(self._tasks.study.scans, key=lambda row: -self._extent(row.image).voxels)
        return self._one_by_one("make_pictures", [[row.image, row.image] for row in rows[:IN_ALL]])

    def _phantom_images(self, labels: Any) -> list[str]:
        rows = [self._tasks.phantoms[label] for label in labels]
        return [row.image for row in rows] + [row.details["reference"] for row in rows if "reference" in row.details]

    def _one_by_one(self, step: str, groups: list[list[str]]) -> dict[str, int]:
        """Memory for the largest group of images, time for all of them."""
        found = [self._of(step, images) for images in groups] or [declared(step, voxels=0)]
        start = COSTS[step].start_min
        minutes = start + sum(demand["runtime"] - start for demand in found)
        return {"mem_mb": max(demand["mem_mb"] for demand in found), "runtime": minutes}

    def _of(self, step: str, images: list[str]) -> dict[str, int]:
        extents = [self._extent(name) for name in images]
        frames = max((extent.frames for extent in extents), default=1)
        return declared(step, voxels=sum(extent.voxels for extent in extents), frames=frames)

    def _extent(self, name: str) -> Extent:
        return self._tasks.extent(name) or DEMONSTRATION_IMAGE
