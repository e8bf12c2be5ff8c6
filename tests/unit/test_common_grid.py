"""The same object wherever it lies: the common grid gives the object's own profile, whatever the pose."""

import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from scipy.special import ndtr
from scipy.stats import ncx2

from evenblur.achieving import ProvingPhantom
from evenblur.demonstration.phantoms import cylinder_image
from evenblur.images.nibabel_alone import nib
from evenblur.measuring import PhantomVolume, measure_volume, plain
from evenblur.phantoms.reference_model import ReferenceModel
from evenblur.phantoms.rigid import Motion
from evenblur.site_effect.between_sites import SitePhantom, compare_phantoms, variation
from evenblur.site_effect.common_grid import (
    CommonObject,
    NotComparableError,
    common_cylinder,
    common_reference,
    common_spheres,
    place_cylinder,
    place_reference,
    place_spheres,
    sample,
)

VOXEL = (2.5, 2.5, 3.0)
SHAPE = (72, 72, 44)
AXES = tuple((np.arange(n) - (n - 1) / 2) * size for n, size in zip(SHAPE, VOXEL, strict=True))


def cylinder(width, *, radius=70.0, length=90.0, centre=(0.0, 0.0, 0.0), tilt=0.0, lean=0.0):
    clean = cylinder_image(
        sample_axes_mm=AXES,
        radius_mm=radius,
        length_mm=length,
        centre_mm=centre,
        tilt_deg=tilt,
        lean_deg=lean,
        in_plane_mm=width,
        axial_mm=width,
    )
    noise = 0.001 * np.random.default_rng(1).standard_normal(SHAPE)
    return PhantomVolume(1000.0 * (clean + noise), VOXEL)


def fitted(scanned):
    return plain(measure_volume("uniform_cylinder", scanned, {}).fit)


def expected(common, width, radius=70.0, length=90.0):
    """The blurred cylinder in its own frame: a blurred disc (non-central chi-square law) times two blurred ends."""
    sigma = width / 2.354820045
    across = np.hypot(common.points[:, 0], common.points[:, 1])
    disc = ncx2.cdf((radius / sigma) ** 2, 2, np.maximum((across / sigma) ** 2, 1e-12))
    z = common.points[:, 2]
    return disc * (ndtr((z + length / 2) / sigma) - ndtr((z - length / 2) / sigma))


@pytest.mark.parametrize(
    "pose", [{}, {"centre": (4.2, -3.1, 2.2), "tilt": 4.0, "lean": 140.0}], ids=["straight", "shifted and tilted"]
)
def test_a_cylinder_is_sampled_in_its_own_frame(pose):
    scanned = cylinder(7.0, **pose)
    common = common_cylinder(radius_mm=70.0, half_length_mm=45.0, margin_mm=8.0, ends=True)
    places = place_cylinder(scanned, fitted(scanned), common, size=(70.0, 45.0))
    off = sample(scanned.volume, places) / 1000.0 - expected(common, 7.0)
    # A place wrong by 0.1 mm moves the steepest edge by 1.4 %.
    assert np.nanmax(np.abs(off)) < 0.03
    assert np.sqrt(np.nanmean(off**2)) < 0.004


def test_a_cylinder_of_another_size_shows_the_same_edges():
    scanned = cylinder(7.0, radius=64.0, length=84.0)
    common = common_cylinder(radius_mm=70.0, half_length_mm=45.0, margin_mm=8.0, ends=True)
    places = place_cylinder(scanned, fitted(scanned), common, size=(70.0, 45.0))
    off = sample(scanned.volume, places) / 1000.0 - expected(common, 7.0)
    assert np.sqrt(np.nanmean(off**2)) < 0.005


def test_ends_that_are_not_seen_are_said_to_be():
    scanned = cylinder(7.0)
    common = common_cylinder(radius_mm=70.0, half_length_mm=45.0, margin_mm=8.0, ends=True)
    with pytest.raises(NotComparableError, match="ends"):
        place_cylinder(scanned, {**fitted(scanned), "length_mm": None}, common, size=(70.0, 45.0))


def test_spheres_are_sampled_about_their_own_middles():
    common, owner = common_spheres([20.0, 10.0], margin_mm=4.0)
    scanned = PhantomVolume(np.zeros(SHAPE), VOXEL)
    spheres = [
        {"diameter_mm": 10.0, "centre_mm": [50.0, 60.0, 45.0]},
        {"diameter_mm": 20.0, "centre_mm": [90.0, 80.0, 60.0]},
    ]
    places = place_spheres(scanned, {"spheres": spheres}, common, owner=owner, diameters_mm=[20.0, 10.0])
    middle = np.argmax(np.where(owner == 1, common.depth_mm, -np.inf))
    assert (places[:, middle] * np.array(VOXEL)).tolist() == pytest.approx([50.0, 60.0, 45.0])
    with pytest.raises(NotComparableError, match="20 mm"):
        place_spheres(scanned, {"spheres": spheres[:1]}, common, owner=owner, diameters_mm=[20.0, 10.0])


def test_a_reference_object_is_followed_through_its_motion():
    block = np.zeros((24, 20, 22))
    block[4:18, 5:14, 6:15] = 1.0
    model = ReferenceModel(block, voxel_mm=(2.0, 2.0, 2.0))
    common = common_reference(model)
    fit = {"flip": "x", "motion": {"rotation_deg": [3.0, -2.0, 8.0], "translation_mm": [4.0, -2.0, 1.5]}}
    scanned = PhantomVolume(np.zeros((50, 48, 40)), (2.0, 2.5, 3.0))
    places = place_reference(scanned, fit, common, model=model)
    # Back through the motion by its inverse, which the library tests against points of its own.
    turn = Rotation.from_rotvec([3.0, -2.0, 8.0], degrees=True).as_matrix()
    motion = Motion(np.array([4.0, -2.0, 1.5]), turn, (-1, 1, 1), model.centre_mm)
    at = (places.T - (np.array(scanned.volume.shape) - 1) / 2) * np.array(scanned.voxel_mm)
    assert np.abs(motion.apply_inverse(at) - common.points).max() < 1e-9


def test_variation_is_the_textbook_ratio():
    values = np.random.default_rng(0).normal(10, 1, (5, 3))
    expected_cv = [np.std(values[:, k], ddof=1) / np.mean(values[:, k]) for k in range(3)]
    assert variation(values).tolist() == pytest.approx(expected_cv)


def saved(tmp_path, name, scanned):
    image = nib.Nifti1Image(scanned.volume.astype(np.float32), np.diag([*VOXEL, 1.0]))
    nib.save(image, tmp_path / name)
    return ProvingPhantom(name, name, "uniform_cylinder", {}, ("in_plane", "axial"))


def test_sites_of_different_widths_agree_after_their_kernels(tmp_path):
    members = []
    for site, width in (("quay", 5.0), ("mill", 6.5), ("fern", 7.5)):
        scanned = cylinder(width, tilt=2.0)
        kernel = float(np.sqrt(64.0 - width**2))
        phantom = saved(tmp_path, f"{site}.nii", scanned)
        members.append(SitePhantom(phantom, site, f"{site}-1.p1", (kernel, kernel), fitted(scanned)))
    (group,) = compare_phantoms(members, target_mm=8.0, study_dir=tmp_path)
    assert (group["why"], group["sites"], group["periods"]) == (None, 3, 3)
    assert group["between_sites"]["change"] < -0.8  # without noise nearly all of the difference was resolution
    assert group["profile"]["after"] < 0.1 * group["profile"]["before"]
    for row in group["by_depth"]:
        assert row["after"] <= row["before"] + 0.002


def test_kernels_that_change_nothing_change_nothing(tmp_path):
    members = []
    for site, width in (("quay", 5.0), ("mill", 6.5)):
        scanned = cylinder(width)
        phantom = saved(tmp_path, f"{site}.nii", scanned)
        members.append(SitePhantom(phantom, site, f"{site}-1.p1", (0.0, 0.0), fitted(scanned)))
    (group,) = compare_phantoms(members, target_mm=8.0, study_dir=tmp_path)
    assert group["between_sites"]["change"] == pytest.approx(0.0, abs=1e-4)


def test_what_cannot_be_compared_says_why(tmp_path):
    scanned = cylinder(5.0)
    phantom = saved(tmp_path, "quay.nii", scanned)
    one = SitePhantom(phantom, "quay", "quay-1.p1", (3.0, 3.0), fitted(scanned))
    other = SitePhantom(phantom, "mill", "mill-1.p1", (3.0, 3.0), {**fitted(scanned), "radius_mm": 200.0})
    point = SitePhantom(
        ProvingPhantom("p", "p.nii", "point_source", {}, ("in_plane",)), "quay", "quay-1.p1", (3.0, 3.0), {}
    )
    found = {group["kind"]: group["why"] for group in compare_phantoms([one, point], target_mm=8.0, study_dir=tmp_path)}
    assert found["uniform_cylinder"] == "only one site scanned this object"
    assert "no object" in found["point_source"]
    (group,) = compare_phantoms([one, other], target_mm=8.0, study_dir=tmp_path)
    assert group["left_out"] or group["why"]


def test_a_common_grid_stays_within_its_number_of_points():
    common = common_cylinder(radius_mm=150.0, half_length_mm=120.0, margin_mm=12.0, ends=True)
    assert isinstance(common, CommonObject)
    assert len(common.points) <= 66_000
    assert common.depth_mm.shape == (len(common.points),)
