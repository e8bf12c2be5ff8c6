"""Widths with a digital reference, against images made by brute force (`reference_simulation`)."""

import json

import numpy as np
import pytest
from scipy import special

from evenblur.phantoms.base import MeasurementError
from evenblur.phantoms.reference_image import measure
from evenblur.phantoms.reference_model import ReferenceModel
from evenblur.phantoms.reference_points import block_labels
from evenblur.phantoms.rigid import Motion, motion_columns
from evenblur.statistics import t_interval
from reference_simulation import FWHM_PER_SIGMA, Truth, invented_head, measured_image, turn_matrix, voxelised
from simulation import add_noise

VOXEL = (3.0, 3.0, 3.0)
SHAPE = (54, 60, 46)
HEAD = invented_head(3.0)
TRUTH = Truth(6.0, 7.5, shift_mm=(5.0, -4.0, 3.0), turn_deg=(3.0, -2.0, 4.0))
NOISE = 100.0  # a tenth of the level that a reference value of 1 has


def image_of(reference, truth=TRUTH, *, shape=SHAPE, voxel_mm=VOXEL):
    return measured_image(reference, VOXEL, shape=shape, voxel_mm=voxel_mm, truth=truth)


def noisy(volume, *, level=NOISE, seed=5):
    return add_noise(volume, level=level, voxel_mm=VOXEL, rng=np.random.default_rng(seed))


def measured(volume, reference=HEAD, *, voxel_mm=VOXEL):
    return measure(volume, voxel_mm=voxel_mm, details={"reference_volume": reference, "reference_voxel_mm": VOXEL})


def codes(result):
    return {flag.code for flag in result.flags}


@pytest.fixture(scope="module")
def clean():
    return image_of(HEAD)


@pytest.fixture(scope="module")
def result(clean):
    return measured(noisy(clean))


def still(model):
    return Motion(np.zeros(3), np.eye(3), (1, 1, 1), model.centre_mm)


def test_blurred_box_is_the_product_of_error_functions():
    volume = np.zeros((30, 25, 20))
    volume[5:25, 3:20, 4:17] = 1.0
    voxel = (2.3, 2.0, 3.0)
    model = ReferenceModel(volume, voxel_mm=voxel)
    low = (np.array([5, 3, 4]) - np.array(volume.shape) / 2) * voxel
    high = (np.array([25, 20, 17]) - np.array(volume.shape) / 2) * voxel
    points = np.random.default_rng(0).uniform(-1, 1, (2000, 3)) * [30.0, 27.0, 30.0]
    for widths in ((3.0, 3.0, 6.0), (12.0, 12.0, 5.0)):
        spread = np.sqrt(2.0) * np.array(widths) / FWHM_PER_SIGMA
        expected = np.prod(0.5 * (special.erf((points - low) / spread) - special.erf((points - high) / spread)), axis=1)
        found = model.sample(points, motion=still(model), in_plane_mm=widths[0], axial_mm=widths[2]).value
        # The images that the spline leaves, as the module states them (4e-4 of the spectrum at the worst frequency).
        assert np.max(np.abs(found - expected)) < 3e-4


def test_derivatives_are_those_of_differences():
    model = ReferenceModel(HEAD, voxel_mm=VOXEL)
    motion = Motion(np.array([3.0, -2.0, 1.0]), turn_matrix((6.0, -3.0, 7.0)), (-1, 1, 1), model.centre_mm)
    points = np.random.default_rng(1).uniform(-1, 1, (400, 3)) * [50.0, 60.0, 40.0]

    def value(shift=(0.0, 0.0, 0.0), turn=(0.0, 0.0, 0.0), in_plane=36.0, axial=81.0):
        return model.sample(
            points,
            motion=motion.moved(np.array(shift), np.array(turn)),
            in_plane_mm=np.sqrt(in_plane),
            axial_mm=np.sqrt(axial),
        ).value

    found = model.sample(points, motion=motion, in_plane_mm=6.0, axial_mm=9.0, derivatives=True)
    columns = motion_columns(found.gradient, points, motion)
    columns[:, 3:] += found.turned
    for k in range(6):
        step = np.eye(6)[k] * 2e-3
        difference = (value(step[:3], step[3:]) - value(-step[:3], -step[3:])) / 4e-3
        # Differentiating the spline's images brings a factor of frequency: a few thousandths of the largest value.
        assert np.max(np.abs(columns[:, k] - difference)) < 5e-3 * np.max(np.abs(difference))
    # A change by 0.3 mm² of 6.5 leaves a third-order error of the difference of about a hundredth.
    square = FWHM_PER_SIGMA**2 * 0.3
    by_in_plane = (value(in_plane=36.0 + square) - value(in_plane=36.0 - square)) / 0.6
    by_axial = (value(axial=81.0 + square) - value(axial=81.0 - square)) / 0.6
    assert np.allclose(found.in_plane, by_in_plane, atol=2e-2 * np.max(np.abs(by_in_plane)))
    assert np.allclose(found.axial, by_axial, atol=2e-2 * np.max(np.abs(by_axial)))


@pytest.mark.parametrize(
    ("truth", "voxel_mm", "shape"),
    [
        (Truth(4.5, 6.0, (11.0, -13.0, 9.0), (5.0, -5.0, 6.0)), VOXEL, (60, 66, 52)),
        (Truth(15.0, 11.0, (-4.0, 6.0, 8.0), (-2.0, 9.0, 3.0)), (4.0, 4.0, 5.0), (48, 52, 38)),
    ],
)
def test_widths_and_motion_are_found_without_noise(truth, voxel_mm, shape):
    result = measured(image_of(HEAD, truth, shape=shape, voxel_mm=voxel_mm), voxel_mm=voxel_mm)
    # Half the promised 0.1 mm; what remains is the generator's finite step.
    assert result.in_plane.fwhm_mm == pytest.approx(truth.in_plane_mm, abs=0.05)
    assert result.axial.fwhm_mm == pytest.approx(truth.axial_mm, abs=0.05)
    assert result.fit["converged"]
    # The translation is that of the centre of mass: turn · c + shift − c. A twentieth of a voxel.
    centre = ReferenceModel(HEAD, voxel_mm=VOXEL).centre_mm
    moved = turn_matrix(truth.turn_deg) @ centre + truth.shift_mm - centre
    assert np.allclose(result.fit["motion"]["translation_mm"], moved, atol=0.15)


def test_noisy_image_gives_widths_within_their_errors(result):
    for width, true in ((result.in_plane, TRUTH.in_plane_mm), (result.axial, TRUTH.axial_mm)):
        low, high = t_interval(width.fwhm_mm, width.se_mm, width.df, 0.999)
        assert low < true < high
        assert width.se_mm < 0.2
    assert not codes(result)
    assert result.fit["flip"] == "none"
    # The filter that made the noise has 5 mm; neighbours give it to a tenth.
    assert result.fit["noise_fwhm_mm"] == pytest.approx(5.0, abs=0.5)


def test_record_is_plain_json_with_a_profile_that_fits(result):
    record = json.loads(json.dumps(result.fit, allow_nan=False))
    profile = record["profile"]
    assert len(profile["position_mm"]) == len(profile["measured"]) == len(profile["fitted"]) <= 200
    residual = np.array(profile["measured"]) - profile["fitted"]
    # Noise of 100 and nothing else.
    assert np.sqrt(np.mean(residual**2)) < 2.0 * NOISE
    assert max(profile["fitted"]) > 2000.0


def test_mirrored_header_is_found_and_flagged():
    truth = Truth(6.0, 7.5, (5.0, -4.0, 3.0), (3.0, -2.0, 4.0), (-1, 1, 1))
    result = measured(noisy(image_of(HEAD, truth)))
    assert result.fit["flip"] == "x"
    assert "flipped_axes" in codes(result)
    assert "mirror_ambiguous" not in codes(result)
    # 0.2 mm is the promised scatter at this noise.
    assert result.in_plane.fwhm_mm == pytest.approx(6.0, abs=0.2)


def test_symmetric_reference_is_flagged_as_ambiguous_and_keeps_the_headers_orientation():
    symmetric = invented_head(3.0, symmetric=True)
    result = measured(noisy(image_of(symmetric)), symmetric)
    assert "mirror_ambiguous" in codes(result)
    assert "flipped_axes" not in codes(result)
    assert result.axial.fwhm_mm == pytest.approx(7.5, abs=0.2)


def test_round_object_is_measured_though_its_turns_are_undetermined():
    ball = voxelised((40, 40, 40), VOXEL, parts=[("ellipsoid", (0.0, 0.0, 0.0), (40.0, 40.0, 40.0), 4.0)])
    result = measured(noisy(image_of(ball, Truth(7.0, 8.0, (2.0, 1.0, -1.0), (1.0, 2.0, 3.0)))), ball)
    assert "mirror_ambiguous" in codes(result)
    assert result.in_plane.fwhm_mm == pytest.approx(7.0, abs=0.3)
    assert result.in_plane.se_mm is not None


def test_sharpened_image_is_flagged(clean):
    frequency = [2 * np.pi * np.fft.fftfreq(n, 3.0) for n in SHAPE]
    square = sum(np.meshgrid(*[f**2 for f in frequency], indexing="ij"))
    # Unsharp mask: 1.8 × image − 0.8 × image blurred by a sigma of 4 mm.
    transfer = 1.8 - 0.8 * np.exp(-0.5 * 16.0 * square)
    sharp = np.fft.ifftn(np.fft.fftn(clean) * transfer).real
    assert "edge_overshoot" in codes(measured(noisy(sharp)))


def test_lesion_missing_from_the_reference_is_flagged(clean):
    result = measured(noisy(clean), invented_head(3.0, symmetric=True))
    assert "reference_mismatch" in codes(result)


def test_object_cut_by_the_field_is_flagged_and_still_measured(clean):
    result = measured(noisy(clean)[:, :, 12:])
    assert "object_cut" in codes(result)
    assert result.in_plane.fwhm_mm == pytest.approx(6.0, abs=0.2)


def test_voxels_without_a_value_away_from_the_edges_are_left_out(clean):
    image = noisy(clean)
    image[:6] = np.nan
    result = measured(image)
    assert result.in_plane.fwhm_mm == pytest.approx(6.0, abs=0.2)


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda image: 0.0 * image, "empty"),
        (lambda image: np.full_like(image, np.nan), "no value"),
        (lambda image: image[0], "no volume"),
        (lambda image: 5000.0 - image, "contrast is inverted"),
    ],
)
def test_image_without_the_object_is_refused(clean, make, words):
    with pytest.raises(MeasurementError, match=words):
        measured(make(noisy(clean)))


@pytest.mark.parametrize(
    ("reference", "words"),
    [
        (np.zeros((9, 9, 9)), "no activity"),
        (np.full((9, 9, 9), np.nan), "not finite"),
        (np.ones((9, 9)), "2 axes"),
        (-HEAD, "no activity"),
    ],
)
def test_reference_that_is_none_is_refused(clean, reference, words):
    with pytest.raises(MeasurementError, match=words):
        measured(clean, reference)


def test_details_without_reference_are_refused(clean):
    with pytest.raises(MeasurementError, match="no reference volume"):
        measure(clean, voxel_mm=VOXEL, details={})


def test_blocks_have_equal_size_and_neighbours_interleave():
    points = np.random.default_rng(2).uniform(0, 1, (1024, 3)) * [100.0, 60.0, 40.0]
    labels = block_labels(points, count=16)
    assert np.array_equal(np.bincount(labels), np.full(16, 64))
    # Every even block has its odd neighbour: the two halves of a pair meet in a plane.
    for pair in range(8):
        even, odd = (points[labels == label] for label in (2 * pair, 2 * pair + 1))
        assert np.any(np.isclose(even.max(axis=0), odd.min(axis=0), atol=5.0))
