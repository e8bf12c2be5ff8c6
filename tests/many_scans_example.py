"""An invented study of many scans, as the audit's input, with as many pictures as a real one has."""

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from audit_example import example_audit
from evenblur.audit.inputs import AuditInput
from evenblur.phantoms.pictures import slice_record, slice_through
from evenblur.picture_pairs import pair_record
from evenblur.study.pictured import pictured_scans

TEMPLATES = Path(__file__).resolve().parents[1] / "workflow" / "report"


def many_scans(*, scans: int, setups: int) -> tuple[AuditInput, dict[str, Any]]:
    """A study of this many scans on this many setups, three setups a site, and the pictures of a few of its scans.

    Every tenth setup's phantom misses the target. Pictures are full of noise, the hardest to pack.
    """
    example = example_audit()
    rng = np.random.default_rng(5)
    template = {key: next(p for p in example.plan["periods"] if p["setup"] == key) for key in "AC"}
    slices, pair = _noisy_slices(rng), _noisy_pair(rng)
    names = [f"cam{number:03d}" for number in range(setups)]
    model_of = {name: "C" if number % 10 == 9 else "A" for number, name in enumerate(names)}
    plan_scans, records, files = [], {}, []
    first = next(scan for scan in example.plan["scans"] if scan["setup"] == "A")
    made = example.scan_records[first["entities"]]["Evenblur"]
    for number in range(scans):
        name = names[number % setups]
        subject = f"s{number:04d}"
        entities = f"sub-{subject}_ses-base"
        held = number % 20 == 19
        plan_scans.append(
            {
                **first,
                "subject": subject,
                "entities": entities,
                "setup": name,
                "sha256": f"{number:064x}",
                "image": f"data/{subject}.nii.gz",
                "status": "held" if held else "accepted",
                "reasons": ["phantom_expired"] if held else [],
            }
        )
        if not held:
            kernel = template[model_of[name]]["kernel"]
            block = {**made, "kernel": kernel, "input": {"path": "x", "sha256": f"{number:064x}"}}
            records[entities] = {"Evenblur": block}
            stem = f"results/harmonised/sub-{subject}/ses-base/pet/{entities}_desc-harmonised_pet"
            files += [f"{stem}.nii.gz", f"{stem}.json"]
    audit = replace(
        example,
        setups=tuple(
            {"setup": name, "site": f"site{number // 3:02d}", "scanner": "invented camera", "reconstruction": "FBP"}
            for number, name in enumerate(names)
        ),
        phantoms=tuple(_phantom(example.phantoms[0], name) for name in names),
        scans=tuple({**scan, "use": "yes"} for scan in plan_scans),
        plan={
            **example.plan,
            "periods": [{**template[model_of[name]], "setup": name, "phantoms": [f"ph{name}"]} for name in names],
            "scans": plan_scans,
        },
        resolution={
            f"ph{name}": {**example.resolution[f"ph{model_of[name]}"], "setup": name, "fit": {"slices": slices}}
            for name in names
        },
        achieved={
            (name, "s1"): {
                **example.achieved[model_of[name], "s1"],
                "profiles": {f"ph{name}": example.achieved["A", "s1"]["profiles"]["phA"]},
                "pictures": {f"ph{name}": pair},
            }
            for name in names
        },
        intake_phantoms={},
        intake_scans={},
        scan_records=records,
        harmonised_files=("results/harmonised/dataset_description.json", *files),
    )
    shown = pictured_scans(plan_scans, {str(row["setup"]): str(row["site"]) for row in audit.setups})
    return audit, dict.fromkeys(shown, pair)


def _phantom(row: Any, name: str) -> dict[str, Any]:
    return {**row, "phantom": f"ph{name}", "setup": name}


def _noisy_slices(rng: np.random.Generator) -> list[dict[str, Any]]:
    volume = rng.uniform(0.0, 50.0, (96, 96, 3))
    plane = slice_through(
        volume.shape, plane="axial", voxel_mm=(2, 2, 4), middle=(48, 48, 1), low=(0, 0, 0), high=(95, 95, 2)
    )
    return [slice_record(volume, plane=plane, fitted=volume[tuple(plane.voxels.T)] - rng.uniform(0, 9, 96 * 96))]


def _noisy_pair(rng: np.random.Generator) -> dict[str, Any]:
    before, after = rng.uniform(0.0, 50.0, (2, 96, 96))
    return pair_record(before, after, pixel_mm=(2.0, 2.0), label="Axial slice 3 of 5")
