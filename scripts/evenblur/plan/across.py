"""What only a look across all images shows: the same picture twice, results sent as scans, units that differ."""

from collections import Counter
from collections.abc import Mapping, Sequence
from typing import Any

from evenblur.images.facts import plain_units
from evenblur.plan.drafts import Record, ScanDraft
from evenblur.study.rows import PhantomRow


def copied_phantoms(phantoms: Sequence[PhantomRow], intake: Mapping[str, Record]) -> dict[str, str]:
    """Phantoms in use whose picture stands under an earlier row of the table, with that row's label.

    A row that its intake holds gives no width, so that its picture may count under the next one.
    """
    first: dict[str, str] = {}
    copies = {}
    for row in phantoms:
        picture = intake[row.phantom]["voxels_sha256"]
        if row.use == "yes" and picture is not None and not intake[row.phantom]["holds"]:
            earlier = first.setdefault(picture, row.phantom)
            if earlier != row.phantom:
                copies[row.phantom] = earlier
    return copies


def hold_copies(scans: Sequence[ScanDraft], phantoms_intake: Mapping[str, Record]) -> None:
    """Hold every scan whose picture stands under a phantom or under an earlier row.

    Whose picture it is, nobody can tell from the file. So a later row is held also where the first one is held for a
    reason of its own: taking the second instead would put the picture into the pool under a name that may be wrong.
    A row that a decision took out of use (`use: no`) has been answered, and counts no more. Pictures of nothing but
    zeros, or without any value, are alike without being copies.
    """
    first: dict[str, str] = {
        str(record["voxels_sha256"]): f"phantom {label}"
        for label, record in phantoms_intake.items()
        if record["voxels_sha256"] is not None
    }
    for scan in scans:
        picture = scan.intake["voxels_sha256"]
        if picture is None or scan.row.use == "no" or _is_blank(scan.intake):
            continue
        earlier = first.setdefault(picture, scan.row.entities)
        if earlier != scan.row.entities:
            scan.hold("duplicate_image", f"the same picture as {earlier}")


def _is_blank(intake: Record) -> bool:
    return "image_zero" in intake["holds"] or intake.get("minimum", 0) is None


def hold_results(scans: Sequence[ScanDraft], outputs: Mapping[str, str]) -> None:
    """Hold every scan whose picture is a harmonised image of this study; `outputs` maps its hash to its scan."""
    for scan in scans:
        source = outputs.get(str(scan.intake["voxels_sha256"]))
        if source is not None:
            scan.hold("already_harmonised", f"the same picture as the harmonised image of {source}")


def flag_units(scans: Sequence[ScanDraft]) -> None:
    """Flag scans in another unit than most scans of the study that state one; of two as frequent, the first counts.

    A flag and no hold: smoothing is linear, so each image is right in its own unit, which its record states. What
    pools the images has to bring them to one scale anyway.
    """
    stated = [(scan, plain_units(scan.intake["units"])) for scan in scans if _counts(scan)]
    if not stated:
        return
    usual, _ = Counter(units for _, units in stated).most_common(1)[0]
    words = next(scan.intake["units"] for scan, units in stated if units == usual)
    for scan, units in stated:
        if units != usual:
            scan.flag("units_differ", f"the values are in {scan.intake['units']}, most of the study's in {words}")


def _counts(scan: ScanDraft) -> bool:
    return scan.row.use == "yes" and bool(scan.intake.get("units"))


def voxels_by_direction(intake: Record) -> dict[str, float]:
    """Largest in-plane and the axial voxel size (mm); empty where image or geometry could not be read."""
    if intake["voxel_mm"] is None or "image_unreadable" in intake["holds"]:
        return {}
    axial = intake["axial_axis"]
    in_plane = max(size for axis, size in enumerate(intake["voxel_mm"]) if axis != axial)
    return {"in_plane": in_plane, "axial": intake["voxel_mm"][axial]}


def in_plane_shape(intake: Record) -> tuple[Any, ...]:
    """Voxels along the two in-plane axes, the smaller number first; empty where the image could not be read."""
    if intake["shape"] is None:
        return ()
    return tuple(sorted(length for axis, length in enumerate(intake["shape"]) if axis != intake["axial_axis"]))
