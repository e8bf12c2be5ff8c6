"""Can the geometry in an image's header be trusted: possible voxel sizes, forms that agree, stated directions.

A kernel in mm is right only if the voxel size and the direction of the bed are. So a header that gives two different
answers holds the image; small differences, and directions that nobody states, are flags.
"""

from typing import Any

import numpy as np

from evenblur.images.findings import Finding
from evenblur.images.nibabel_alone import nib
from evenblur.images.reading import MM_PER_UNIT, Image

SMALLEST_VOXEL_MM, LARGEST_VOXEL_MM = 0.1, 20.0
"""Voxels of emission tomography lie well inside these limits, small animals' included (common practice, no source)."""

SIZES_AGREE = 0.01
"""Two statements of a voxel size may differ by this share: headers round."""

ROUNDING_DEG, CONTRADICTION_DEG = 0.1, 1.0
"""Two forms closer than the first differ by rounding alone (single-precision quaternions near half a turn leave 0.04
degrees); from the second on they contradict each other."""

_MEND = "correct the header or send the image as the scanner exported it"


def geometry_findings(image: Image) -> list[Finding]:
    """What is wrong or uncertain about the geometry of an opened image.

    Parameters
    ----------
    image
        An opened image.

    Returns
    -------
    list of Finding
        Holds have the code `image_unreadable`; flags are `forms_differ` and `orientation_unstated`.

    >>> from evenblur.images.grid import grid_from_affine
    >>> affine = np.diag([2.0, 2.0, 60.0, 1.0])
    >>> source = nib.Nifti1Image(np.zeros((4, 4, 4), np.float32), affine)
    >>> image = Image("a.nii", source, grid_from_affine(affine, (4, 4, 4)), 1)
    >>> [(found.code, found.holds) for found in geometry_findings(image)]
    [('image_unreadable', True)]
    """
    sizes = image.grid.voxel_mm
    if min(sizes) < SMALLEST_VOXEL_MM or max(sizes) > LARGEST_VOXEL_MM:
        return [_contradiction(f"voxels of {_by(sizes)} mm cannot be", "correct the voxel size or its unit")]
    if isinstance(image.source, nib.Nifti1Pair):
        return _nifti_findings(image.source.header, image)
    if isinstance(image.source, nib.analyze.AnalyzeImage):
        return [_unstated()]
    return []


def _nifti_findings(header: Any, image: Image) -> list[Finding]:
    forms = {name: int(header[f"{name}_code"]) for name in ("qform", "sform")}
    if not any(forms.values()):
        return [_unstated()]
    # The grid is that of the sform where both are given; pixdim then is a second statement of the voxel size.
    scale = MM_PER_UNIT.get(header.get_xyzt_units()[0], 1.0)
    stated = np.abs(np.asarray(header["pixdim"][1:4], dtype=float)) * scale
    if not np.all(np.isfinite(stated)) or np.any(stated <= 0):
        return [_contradiction("its header gives no voxel size (pixdim)")]
    if np.any(np.abs(stated / np.array(image.grid.voxel_mm) - 1) > SIZES_AGREE):
        return [_contradiction(f"pixdim gives voxels of {_by(stated)} mm, the sform {_by(image.grid.voxel_mm)} mm")]
    if not all(forms.values()):
        return []
    return _compare_forms(header, scale, image)


def _compare_forms(header: Any, scale: float, image: Image) -> list[Finding]:
    try:
        qform = np.asarray(header.get_qform(), dtype=float)
    except ValueError:  # the quaternion is none
        return [_contradiction("its qform is no rotation")]
    sform = np.asarray(header.get_sform(), dtype=float)
    first, second = (form[:3, :3] / np.linalg.norm(form[:3, :3], axis=0) for form in (qform, sform))
    if np.linalg.det(first) * np.linalg.det(second) < 0:
        return [_contradiction("qform and sform are mirror images of each other")]
    angle = turn_deg(first, second)
    if angle >= CONTRADICTION_DEG:
        return [_contradiction(f"qform and sform are {angle:.1f} degrees apart")]
    if angle > ROUNDING_DEG:
        text = f"qform and sform are {angle:.2f} degrees apart; the sform was used"
        return [Finding("forms_differ", text, value=round(angle, 3))]
    middle = np.array([*((np.array(image.grid.shape) - 1) / 2), 1.0])
    apart = float(np.linalg.norm(((qform - sform) @ middle)[:3])) * scale
    if apart > max(image.grid.voxel_mm):
        text = f"qform and sform place the image {apart:.1f} mm apart; no width depends on it"
        return [Finding("forms_differ", text, value=round(apart, 2))]
    return []


def turn_deg(first: np.ndarray, second: np.ndarray) -> float:
    """Angle (degrees) of the turn between two 3 x 3 rotations (or two rotoinversions), well behaved near 0.

    Two rotations an angle a apart have a Frobenius distance of 2 sqrt(2) sin(a / 2).

    >>> quarter = np.array([[0.0, -1.0, 0.0], [1.0, 0.0, 0.0], [0.0, 0.0, 1.0]])
    >>> round(turn_deg(np.eye(3), quarter), 6)
    90.0
    """
    distance = float(np.linalg.norm(first - second)) / (2 * np.sqrt(2))
    return float(np.degrees(2 * np.arcsin(min(1.0, distance))))


def _contradiction(what: str, mend: str = _MEND) -> Finding:
    return Finding("image_unreadable", f"{what}; {mend}", holds=True)


def _unstated() -> Finding:
    text = "the header states no directions; the third array axis was taken to run along the bed"
    return Finding("orientation_unstated", text)


def _by(sizes: Any) -> str:
    return " x ".join(f"{float(size):.4g}" for size in sizes)
