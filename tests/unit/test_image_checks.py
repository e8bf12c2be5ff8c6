"""What intake finds in headers and values, held against headers and arrays whose truth is known by construction."""

import nibabel as nib
import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from evenblur.images.geometry_checks import geometry_findings, turn_deg
from evenblur.images.reading import open_image
from evenblur.images.value_checks import look_at_values, value_findings

AFFINE = np.diag([2.0, 2.0, 2.5, 1.0])
VOLUME = np.random.default_rng(3).uniform(1, 2, (12, 10, 8)).astype(np.float32)


def opened(tmp_path, volume=VOLUME, affine=AFFINE, change=None):
    image = nib.Nifti1Image(volume, affine)
    if change:
        change(image.header)
    path = tmp_path / "a.nii"
    path.write_bytes(image.to_bytes())
    return open_image(path)


def geometry(tmp_path, **options):
    return [(found.code, found.holds) for found in geometry_findings(opened(tmp_path, **options))]


def values(tmp_path, volume, *, scan=True, change=None, axial_axis=2):
    seen = look_at_values(opened(tmp_path, volume, change=change))
    return [(found.code, found.holds) for found in value_findings(seen, axial_axis=axial_axis, scan=scan)]


HELD = [("image_unreadable", True)]
CUT_OFF = [("image_not_finite", True)]


# --- geometry


def both_forms(turn_degrees, shift_mm=0.0):
    """The sform as the affine, the qform turned about a skew axis and shifted."""

    def change(header):
        turn = np.eye(4)
        turn[:3, :3] = Rotation.from_rotvec(np.radians(turn_degrees) * np.array([1, 2, 2]) / 3).as_matrix()
        moved = turn @ AFFINE
        moved[0, 3] += shift_mm
        header.set_sform(AFFINE, code=1)
        header.set_qform(moved, code=1)

    return change


@pytest.mark.parametrize("degrees", [0.0, 0.01, 0.3, 1.0, 30.0, 90.0, 179.0, 180.0])
def test_the_turn_between_two_rotations_is_scipys(degrees):
    first = Rotation.from_euler("xyz", [10, 20, 30], degrees=True)
    second = Rotation.from_rotvec(np.radians(degrees) * np.array([2, -1, 2]) / 3) * first
    # Source: scipy's own magnitude of the rotation between them.
    expected = np.degrees((second * first.inv()).magnitude())
    assert turn_deg(first.as_matrix(), second.as_matrix()) == pytest.approx(expected, abs=1e-6)


@pytest.mark.parametrize(
    ("degrees", "expected"),
    [(0.0, []), (0.05, []), (0.2, [("forms_differ", False)]), (0.95, [("forms_differ", False)]), (1.05, HELD)],
)
def test_two_forms_flag_under_a_degree_and_hold_beyond(tmp_path, degrees, expected):
    assert geometry(tmp_path, change=both_forms(degrees)) == expected


def test_two_forms_that_only_shift_the_image_are_flagged(tmp_path):
    assert geometry(tmp_path, change=both_forms(0.0, shift_mm=2.0)) == []  # less than a voxel
    assert geometry(tmp_path, change=both_forms(0.0, shift_mm=30.0)) == [("forms_differ", False)]


def test_quaternions_near_half_a_turn_are_no_contradiction(tmp_path):
    # There single precision is at its worst: the scalar part is the small rest of one minus three squares.
    for angle in (179.0, 179.9, 179.99, 180.0):
        turn = np.eye(4)
        turn[:3, :3] = Rotation.from_euler("z", angle, degrees=True).as_matrix()
        affine = turn @ AFFINE

        def change(header, affine=affine):
            header.set_sform(affine, code=1)
            header.set_qform(affine, code=1)

        assert geometry(tmp_path, affine=affine, change=change) == [], angle


def test_mirrored_forms_hold(tmp_path):
    def change(header):
        header.set_sform(AFFINE, code=1)
        header.set_qform(AFFINE @ np.diag([-1.0, 1, 1, 1]), code=1)

    assert geometry(tmp_path, change=change) == HELD


@pytest.mark.parametrize(
    ("sizes", "expected"), [((2, 2, 2.5), []), ((2.004, 2, 2.5), []), ((2.1, 2, 2.5), HELD), ((0, 2, 2.5), HELD)]
)
def test_pixdim_must_agree_with_the_sform(tmp_path, sizes, expected):
    def change(header):
        header.set_sform(AFFINE, code=1)
        header["qform_code"] = 0
        header["pixdim"][1:4] = sizes

    assert geometry(tmp_path, change=change) == expected


@pytest.mark.parametrize(
    ("size", "expected"), [(0.05, HELD), (0.2, []), (9.6, []), (20.0, []), (25.0, HELD), (2000.0, HELD)]
)
def test_voxel_sizes_that_cannot_be_hold(tmp_path, size, expected):
    assert geometry(tmp_path, affine=np.diag([size, size, size, 1.0])) == expected


def test_a_header_in_metres_is_read_as_such(tmp_path):
    affine = np.diag([0.002, 0.002, 0.0025, 1.0])
    assert geometry(tmp_path, affine=affine, change=lambda header: header.set_xyzt_units("meter")) == []
    assert geometry(tmp_path, affine=affine) == HELD


def test_directions_that_nobody_states_are_flagged(tmp_path):
    path = tmp_path / "a.nii"
    data = bytearray(nib.Nifti1Image(VOLUME, AFFINE).to_bytes())
    data[252:256] = bytes(4)  # qform_code and sform_code
    path.write_bytes(data)
    assert [found.code for found in geometry_findings(open_image(path))] == ["orientation_unstated"]
    nib.save(nib.AnalyzeImage(VOLUME, AFFINE), tmp_path / "b.img")
    assert [found.code for found in geometry_findings(open_image(tmp_path / "b.img"))] == ["orientation_unstated"]


# --- values


def test_a_sound_image_has_nothing_to_say(tmp_path):
    middle = np.zeros((12, 10, 8), np.float32)
    middle[3:9, 3:7, 2:6] = VOLUME[3:9, 3:7, 2:6]
    assert values(tmp_path, middle) == []


def whole_numbers(share_at_limit):
    stored = np.random.default_rng(5).integers(0, 30_000, (40, 40, 40)).astype(np.int16)
    stored[[0, -1]] = stored[:, [0, -1]] = stored[:, :, [0, -1]] = 0
    inside = np.flatnonzero(stored)
    stored.ravel()[inside[: round(share_at_limit * stored.size)]] = 32767
    return stored


@pytest.mark.parametrize(
    ("voxels", "expected"),
    [
        (1, []),
        (2, []),
        (5, [("saturated", False)]),
        (7, [("image_not_finite", True)]),
        (640, [("image_not_finite", True)]),
    ],
)
def test_whole_numbers_at_their_limit_are_cut_off(tmp_path, voxels, expected):
    # 64,000 voxels: 6.4 of them are the share that holds.
    assert values(tmp_path, whole_numbers(voxels / 64_000)) == expected


def test_a_mask_of_two_values_was_not_cut_off(tmp_path):
    mask = np.where(whole_numbers(0.0) > 15_000, 255, 0).astype(np.uint8)
    assert ("saturated", False) in values(tmp_path, mask)
    assert CUT_OFF[0] not in values(tmp_path, mask)


@pytest.mark.parametrize(("voxels", "expected"), [(60, []), (70, [("saturated", False)])])
def test_with_a_scale_factor_a_plateau_at_the_limit_is_only_flagged(tmp_path, voxels, expected):
    change = lambda header: header.set_slope_inter(0.37, 1.5)  # noqa: E731
    stored = whole_numbers(voxels / 64_000)
    path = tmp_path / "a.nii"
    image = nib.Nifti1Image(stored, AFFINE)
    image.header.set_slope_inter(1, 0)
    data = bytearray(image.to_bytes())
    header = image.header.copy()
    change(header)
    data[112:120] = np.array([0.37, 1.5], "<f4").tobytes()
    path.write_bytes(data)
    seen = look_at_values(open_image(path))
    assert (seen.at_limit, seen.scaled) == (voxels, True)
    found = [(part.code, part.holds) for part in value_findings(seen, axial_axis=2, scan=True)]
    assert [entry for entry in found if entry[0] != "field_short"] == expected


def test_shares_ranges_and_totals_are_those_of_a_slow_count(tmp_path):
    volume = np.random.default_rng(8).normal(0, 100, (6, 5, 4, 3)).astype(np.float32)
    volume[0, 0, 0] = np.nan
    volume[..., 1] = 0
    seen = look_at_values(opened(tmp_path, volume))
    numbers = [float(value) for value in volume.ravel()]
    finite = [value for value in numbers if not np.isnan(value)]
    assert seen.missing == len(numbers) - len(finite)
    assert seen.negative == sum(value < 0 for value in finite)
    assert (seen.minimum, seen.maximum) == (min(finite), max(finite))
    assert seen.total == pytest.approx(sum(finite), rel=1e-6)  # float32 values summed in another order
    assert (seen.frames, seen.empty_frames) == (3, 1)
    for axis, profile in enumerate(seen.profiles):
        slow = [np.nansum(np.take(volume, index, axis=axis), dtype=float) for index in range(volume.shape[axis])]
        assert profile == pytest.approx(slow, rel=1e-6)


@pytest.mark.parametrize(
    ("volume", "expected"),
    [
        (np.zeros((4, 4, 4), np.float32), [("image_zero", True)]),
        (np.full((4, 4, 4), np.nan, np.float32), [("image_not_finite", True)]),
        (np.full((4, 4, 4), 7, np.float32), [("constant_image", False)]),
    ],
)
def test_pictures_of_nothing(tmp_path, volume, expected):
    assert values(tmp_path, volume) == expected


def test_an_object_that_goes_on_beyond_the_field_is_flagged(tmp_path):
    along = np.zeros((12, 12, 8), np.float32)
    along[4:8, 4:8, :] = 1
    assert values(tmp_path, along) == [("field_short", False)]
    assert values(tmp_path, along, scan=False) == []  # a phantom may reach through the whole field
    aside = np.zeros((12, 12, 8), np.float32)
    aside[8:, 4:8, 3:5] = 1
    assert values(tmp_path, aside) == values(tmp_path, aside, scan=False) == [("field_short", False)]
