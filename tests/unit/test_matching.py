"""A kernel is matched direction by direction, against a phantom whose answer is written down."""

from types import SimpleNamespace

import pytest

from evenblur.matching import NEAR_MM, match_kernel
from evenblur.phantoms.base import MeasurementError

TARGET = {"in_plane": 8.0, "axial": 8.0}


class Phantom:
    """Answers with the width that a blur of `sharp` mm gets from a kernel, made wider by a share as tails do."""

    def __init__(self, sharp, tails=0.0, directions=("in_plane", "axial")):
        self.sharp, self.tails = sharp, tails
        self.phantom = SimpleNamespace(directions=directions)

    def measure_smoothed(self, in_plane_mm, axial_mm):
        if self.sharp is None:
            raise MeasurementError("nothing to see")
        widths = (
            ((s**2 + k**2) ** 0.5) * (1 + self.tails) for s, k in zip(self.sharp, (in_plane_mm, axial_mm), strict=True)
        )
        in_plane, axial = (SimpleNamespace(fwhm_mm=width) for width in widths)
        return SimpleNamespace(in_plane=in_plane, axial=axial)


def matched(phantom, **kernel):
    return match_kernel([phantom], setup="a-1", phantom_session="p1", kernel=kernel, target=TARGET)


def test_a_gaussian_keeps_the_kernel_of_quadrature():
    record = matched(Phantom((4.8, 6.4)), in_plane=6.4, axial=4.8)  # 3-4-5 triples
    assert record["settled"]
    assert record["kernel"] == {"in_plane_mm": 6.4, "axial_mm": 4.8}
    assert len(record["rounds"]) == 1


def test_tails_are_made_up_for():
    record = matched(Phantom((4.8, 6.4), tails=0.05), in_plane=6.4, axial=4.8)
    assert record["settled"]
    # 1.05 sqrt(4.8^2 + k^2) = 8: k = 5.905; 1.05 sqrt(6.4^2 + k^2) = 8: k = 4.130; to the tolerance of the match.
    assert record["kernel"]["in_plane_mm"] == pytest.approx(((8 / 1.05) ** 2 - 4.8**2) ** 0.5, abs=2 * NEAR_MM)
    assert record["kernel"]["axial_mm"] == pytest.approx(((8 / 1.05) ** 2 - 6.4**2) ** 0.5, abs=3 * NEAR_MM)


def test_a_direction_above_the_target_does_not_keep_the_other_from_its_match():
    record = matched(Phantom((8.1, 6.4)), in_plane=0.0, axial=4.0)
    assert record["settled"]
    assert record["kernel"]["in_plane_mm"] == 0.0
    assert record["kernel"]["axial_mm"] == pytest.approx(4.8, abs=2 * NEAR_MM)


def test_without_a_width_quadrature_stands_and_the_record_says_so():
    record = matched(Phantom(None), in_plane=6.4, axial=4.8)
    assert not record["settled"]
    assert record["kernel"] == {"in_plane_mm": 6.4, "axial_mm": 4.8}


def test_a_direction_that_no_phantom_speaks_for_keeps_its_kernel():
    record = matched(Phantom((4.8, 6.4), tails=0.05, directions=("in_plane",)), in_plane=6.4, axial=3.3)
    assert record["settled"]
    assert record["kernel"]["axial_mm"] == 3.3
