"""A real head's anatomy, smoothed by the engine in two steps: the widths read add in quadrature.

The grey and white matter maps are those of the open ICBM 2009a template in the nilearn package.
"""

from pathlib import Path

import nibabel as nib
import nilearn
import numpy as np
import pytest

from evenblur.phantoms.reference_image import measure
from evenblur.smoothing import smooth_volume
from reference_formulas import quadrature
from reference_simulation import Truth, measured_image

TEMPLATES = Path(nilearn.__file__).parent / "datasets" / "data"
SOURCE = (
    "grey and white matter of the ICBM 152 2009a template (Fonov et al. 2011, citation from memory) in nilearn; "
    "4:1 as EARL's page on brain PET has it for the brain phantom"
)
REFERENCE_MM = (2.0, 2.0, 2.0)
VOXEL_MM = (2.5, 2.5, 2.5)
BEFORE = Truth(5.0, 6.0, shift_mm=(1.3, -0.8, 0.6), turn_deg=(2.0, -1.0, 3.0))


def halved(name):
    """A map of the template on voxels of 2 mm, each the mean of eight."""
    values = np.asarray(
        nib.load(TEMPLATES / f"mni_icbm152_{name}_tal_nlin_sym_09a_converted.nii.gz").dataobj, dtype=float
    )
    even = values[tuple(slice(0, n // 2 * 2) for n in values.shape)] / 255.0
    nx, ny, nz = (n // 2 for n in even.shape)
    return even.reshape(nx, 2, ny, 2, nz, 2).mean(axis=(1, 3, 5))


@pytest.fixture(scope="module")
def head():
    """Grey matter 4, white matter 1, and a hot lesion of 12 mm in the white matter of one side."""
    activity = 4.0 * halved("gm") + halved("wm")
    x, y, z = (np.arange(n) * 2.0 for n in activity.shape)
    # Where the white matter is deepest on one side.
    distance = (x[:, None, None] - 122.0) ** 2 + (y[:, None] - 174.0) ** 2 + (z - 72.0) ** 2
    activity[distance <= 6.0**2] = 8.0
    return activity


def test_two_steps_of_smoothing_read_as_quadrature(check, head):
    # The template ends below the brain stem: the field is longer than it, so that nothing lies at the field's ends.
    image = measured_image(head, REFERENCE_MM, shape=(64, 80, 84), voxel_mm=VOXEL_MM, truth=BEFORE, fine_mm=0.9)
    once = smooth_volume(image, voxel_mm=VOXEL_MM, fwhm_mm=(3.0, 3.0, 3.0))
    twice = smooth_volume(once, voxel_mm=VOXEL_MM, fwhm_mm=(4.0, 4.0, 4.0))
    details = {"reference_volume": head, "reference_voxel_mm": REFERENCE_MM}
    for name, made, added in (("3 mm", once, (3.0,)), ("3 and then 4 mm", twice, (3.0, 4.0))):
        found = measure(made.astype(float), voxel_mm=VOXEL_MM, details=details)
        assert found.in_plane is not None
        assert found.axial is not None
        check.close(
            f"in-plane and axial width of a head of 5 and 6 mm after {name}",
            source=f"{SOURCE}; quadrature",
            expected=[quadrature(5.0, *added), quadrature(6.0, *added)],
            found=[found.in_plane.fwhm_mm, found.axial.fwhm_mm],
            # Fine steps of 0.83 mm in the image take up to step^2 / 12 from its variance: 0.025 mm of a width.
            within=0.03,
            digits=3,
            unit="mm",
        )
