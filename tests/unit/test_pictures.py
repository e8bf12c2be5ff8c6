"""Slices of fits in records: the right voxels the right way up, one scale for data and fit, and small."""

import base64
import json

import numpy as np
import pytest
from scipy import ndimage

import simulation
from evenblur.measuring import plain
from evenblur.phantoms import hot_spheres, reference_image, uniform_cylinder
from evenblur.phantoms.blurred_sphere import blurred_ball
from evenblur.phantoms.pictures import DIFFERENCE_STEPS, LARGEST_SIDE, slice_record, slice_through

FWHM_PER_SIGMA = 2.3548200450309493


def greys(record, name):
    flat = np.frombuffer(base64.b64decode(record[name]), dtype=np.uint8)
    return flat.reshape(record["height"], record["width"]).astype(float)


def values(record, name):
    """A picture's values in the image's unit, by the scale that the record states."""
    if name == "difference":
        return (greys(record, name) - 128.0) / 127.0 * record["difference_span"]
    return record["low"] + greys(record, name) / 255.0 * (record["high"] - record["low"])


def numbered(shape):
    """A volume whose values tell their voxel: 10000 x + 100 y + z."""
    x, y, z = np.indices(shape, dtype=float)
    return 10000 * x + 100 * y + z


def test_axial_slices_have_x_across_and_y_up():
    volume = numbered((5, 4, 3))
    plane = slice_through(
        (5, 4, 3), plane="axial", voxel_mm=(2, 3, 4), middle=(2, 2, 1.2), low=(1, 0, 0), high=(3, 2, 2)
    )
    shown = volume[tuple(plane.voxels.T)].reshape(plane.index.shape[:2])
    assert shown.tolist() == [[10201, 20201, 30201], [10101, 20101, 30101], [10001, 20001, 30001]]
    assert plane.pixel_mm == (2, 3)
    assert plane.label == "Axial slice 2 of 3"


def test_coronal_slices_have_x_across_and_z_up():
    volume = numbered((5, 4, 3))
    plane = slice_through(
        (5, 4, 3), plane="coronal", voxel_mm=(2, 3, 4), middle=(2, 2.9, 1), low=(0, 0, 0), high=(1, 9, 9)
    )
    shown = volume[tuple(plane.voxels.T)].reshape(plane.index.shape[:2])
    assert shown.tolist() == [[302, 10302], [301, 10301], [300, 10300]]
    assert plane.pixel_mm == (2, 4)


@pytest.mark.parametrize(("count", "stride"), [(96, 1), (97, 2), (192, 2), (193, 3), (400, 5)])
def test_large_slices_are_shown_by_every_other_voxel(count, stride):
    plane = slice_through(
        (count, 4, 3), plane="axial", voxel_mm=(1.5, 1.0, 1.0), middle=(0, 0, 0), low=(0, 0, 0), high=(count, 9, 9)
    )
    assert plane.index[0, :, 0].tolist() == list(range(0, count, stride))
    assert plane.index.shape[1] <= LARGEST_SIDE
    assert plane.pixel_mm[0] == 1.5 * stride


def test_a_slice_beyond_the_volume_is_its_last():
    plane = slice_through(
        (5, 4, 3), plane="axial", voxel_mm=(1, 1, 1), middle=(0, 0, 8), low=(-3, -3, 0), high=(9, 9, 0)
    )
    assert plane.index.shape == (4, 5, 3)
    assert set(plane.index[..., 2].ravel()) == {2}


def test_another_plane_is_refused():
    with pytest.raises(ValueError, match="sagittal"):
        slice_through((5, 4, 3), plane="sagittal", voxel_mm=(1, 1, 1), middle=(0, 0, 0), low=(0, 0, 0), high=(1, 1, 1))


@pytest.fixture
def ramp():
    """A ramp along x from 0 to 31 on 32 by 8 pixels, and its plane."""
    volume = np.repeat(np.arange(32.0)[:, None, None], 8, axis=1)
    plane = slice_through(
        (32, 8, 1), plane="axial", voxel_mm=(2, 2, 2), middle=(0, 0, 0), low=(0, 0, 0), high=(31, 7, 0)
    )
    return volume, plane


def test_the_stated_scale_gives_the_values_back(ramp):
    volume, plane = ramp
    record = slice_record(volume, plane=plane, fitted=volume[tuple(plane.voxels.T)] - 2.0)
    assert (record["width"], record["height"], record["width_mm"], record["height_mm"]) == (32, 8, 64.0, 16.0)
    row = np.arange(32.0)
    grey = (record["high"] - record["low"]) / 255.0
    # Greys are whole numbers: half a step off at most. The highest half per cent of voxels may be cut off: here none.
    assert np.max(np.abs(values(record, "measured") - row)) <= 0.51 * grey
    assert np.max(np.abs(values(record, "fitted") - (row - 2.0))) <= 0.51 * grey
    step = record["difference_span"] / 127.0
    assert np.max(np.abs(values(record, "difference") - 2.0)) <= 0.51 * step


@pytest.mark.parametrize(("share", "step"), [(0.0, 0.05), (0.04, 0.05), (0.07, 0.1), (0.3, 0.5), (0.9, 1.0)])
def test_the_difference_spans_a_round_share_of_the_range(share, step):
    volume = np.zeros((40, 40, 1))
    volume[20:] = 100.0
    plane = slice_through(
        (40, 40, 1), plane="axial", voxel_mm=(1, 1, 1), middle=(0, 0, 0), low=(0, 0, 0), high=(39, 39, 0)
    )
    inside = volume[tuple(plane.voxels.T)]
    fitted = np.where(inside > 0, inside - 100.0 * share, 0.0)  # within the range, which so stays 0 to 100
    record = slice_record(volume, plane=plane, fitted=fitted)
    assert (record["low"], record["high"]) == (0.0, 100.0)
    assert record["difference_span"] == pytest.approx(100.0 * step)
    assert step in DIFFERENCE_STEPS


def test_a_stray_voxel_does_not_set_the_scale(ramp):
    volume, plane = ramp
    volume = volume.copy()
    volume[3, 3, 0] = 1e6
    record = slice_record(volume, plane=plane, fitted=np.zeros(plane.voxels.shape[0]))
    assert record["high"] == pytest.approx(31.0)
    assert greys(record, "measured").max() == 255


def test_pixels_without_a_value_are_empty(ramp):
    volume, plane = ramp
    volume, fitted = volume.copy(), volume[tuple(plane.voxels.T)] - 1.0
    volume[5, 7, 0] = np.nan
    fitted[-1] = np.nan
    record = slice_record(volume, plane=plane, fitted=fitted)
    assert greys(record, "measured")[0, 5] == 0
    assert greys(record, "difference")[0, 5] == 128
    assert greys(record, "fitted")[-1, -1] == 0
    assert greys(record, "difference")[-1, -1] == 128
    nothing = slice_record(np.full_like(volume, np.nan), plane=plane, fitted=np.full(fitted.size, np.nan))
    assert set(greys(nothing, "difference").ravel()) == {128.0}


# The kinds' own slices: without noise, the fit is the image.


def small(measurement):
    """The slices as the record keeps them, which must stay small."""
    text = json.dumps(plain(measurement.fit), allow_nan=False)
    assert len(text) < 200_000
    return json.loads(text)["slices"]


def worst_difference(record):
    return np.max(np.abs(values(record, "difference"))) / (record["high"] - record["low"])


def cylinder_slice(ends_mm):
    """The only slice of a cylinder 80 mm across, in 28 slices of 3 mm."""
    image = simulation.straight_cylinder(
        (64, 62, 28),
        voxel_mm=(2.0, 2.0, 3.0),
        centre_mm=(63.3, 60.2),
        radius_mm=40.0,
        ends_mm=ends_mm,
        in_plane_mm=6.0,
        axial_mm=7.0,
    )
    (record,) = small(uniform_cylinder.measure(1000.0 * image, voxel_mm=(2.0, 2.0, 3.0), details={}))
    # Greys of a span of 5 % are 0.04 % wide; the fit of a noise-free image is good to 0.5 % of the activity.
    assert worst_difference(record) < 0.006
    return record


def test_a_cylinder_without_ends_shows_its_wall_all_round():
    record = cylinder_slice((-1e6, 1e6))
    assert record["plane"] == "axial"
    shown = values(record, "fitted") > 500.0
    # 40 voxels of 2 mm are 80 mm, and a disc holds pi / 4 of its square: to 1 %, half a voxel all round being 5 %.
    assert [abs(int(shown.any(axis=axis).sum()) - 40) <= 1 for axis in (0, 1)] == [True, True]
    assert abs(shown.sum() / (np.pi * 20.0**2) - 1.0) < 0.01


@pytest.mark.parametrize("ends_mm", [(16.0, 1e6), (16.0, 71.0)])
def test_a_cylinders_slice_shows_wall_and_ends(ends_mm):
    record = cylinder_slice(ends_mm)
    assert record["plane"] == "coronal"
    shown = values(record, "fitted") > 500.0
    # 40 columns of 2 mm are 80 mm; rows from the top: z falls.
    assert abs(int(shown.any(axis=0).sum()) - 40) <= 1
    z_mm = 3.0 * (27 - np.arange(28))
    assert shown.any(axis=1).tolist() == [bool(ends_mm[0] < z < ends_mm[1]) for z in z_mm]


def test_spheres_have_an_axial_and_a_coronal_slice_through_the_largest():
    axis = (np.arange(40) - 19.5) * 2.0
    sigma = {"sigma_in_plane_mm": 6.0 / FWHM_PER_SIGMA, "sigma_axial_mm": 7.0 / FWHM_PER_SIGMA}
    large = blurred_ball(axis + 16.0, axis, axis, radius_mm=11.0, **sigma)
    image = 5.0 * (large + blurred_ball(axis - 18.0, axis - 10.0, axis, radius_mm=8.0, **sigma))
    details = {"diameters_mm": [22.0, 16.0], "wall_mm": 0.0}
    axial, coronal = small(hot_spheres.measure(image, voxel_mm=(2.0, 2.0, 2.0), details=details))
    assert (axial["plane"], coronal["plane"]) == ("axial", "coronal")
    for record in (axial, coronal):
        assert worst_difference(record) < 0.006
    # The largest sphere stands to the left: its middle row in the coronal slice is 11 voxels of 2 mm wide.
    widest = int((values(coronal, "measured")[:, : coronal["width"] // 2] > 2.5).sum(axis=1).max())
    assert abs(widest - 11) <= 1
    # Between the spheres nothing was fitted: there is no difference, whatever the image holds.
    assert (greys(axial, "difference") == 128).mean() > 0.2


def test_a_references_slices_show_the_moved_object():
    box = np.zeros((30, 30, 30))
    box[8:22, 9:23, 7:21] = 1.0
    moved = ndimage.shift(box, (3, 0, 0), order=0)
    image = ndimage.gaussian_filter(100.0 * moved, 1.5)
    details = {"reference_volume": box, "reference_voxel_mm": (3.0, 3.0, 3.0)}
    found = reference_image.measure(image, voxel_mm=(3.0, 3.0, 3.0), details=details)
    records = small(found)
    assert [record["plane"] for record in records] == ["axial", "coronal"]
    for record in records:
        # The image is made of samples, the model of whole voxels: what the fit cannot take as width is of the fourth
        # order in voxel over sigma, and filtering mirrors 0.1 % of the object at the border, 3 sigma away.
        assert worst_difference(record) < 0.01
