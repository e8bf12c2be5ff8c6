"""Published widths of one phantom with and without an added filter, beside quadrature."""

import numpy as np

from evenblur.smoothing import smooth_volume
from reference_formulas import FWHM_PER_SIGMA, moment_width, quadrature

SOURCE = "Ikari et al. 2016, EJNMMI Phys 3:23, tables 3 and 4"
# Scanner, width without the filter, filter, width with it.
PAIRS = [("A", 5.3, 4.0, 6.7), ("B", 5.3, 4.0, 6.3), ("B", 5.3, 5.0, 6.2), ("C, no axial filter", 7.0, 4.0, 7.0)]


def engine_width(before_mm, filter_mm):
    """Width of a point image of `before_mm` after the engine's filter, from its second moment."""
    x = np.arange(-40.0, 41.0)
    point = np.exp(-0.5 * (x * FWHM_PER_SIGMA / before_mm) ** 2)[:, None, None]
    smoothed = smooth_volume(point, voxel_mm=(1.0, 1.0, 1.0), fwhm_mm=(filter_mm, 0.0, 0.0))
    return moment_width(x, smoothed[:, 0, 0].astype(float))


def test_added_filters(check):
    for index, (scanner, before, added, after) in enumerate(PAIRS):
        name = f"width of {before} mm after a filter of {added:g} mm, scanner {scanner}"
        found = engine_width(before, added)
        assert abs(found - quadrature(before, added)) < 1e-3
        if index == 0:
            # One digit is published, and phantom widths repeat to a few tenths of a millimetre.
            check.close(name, source=SOURCE, expected=after, found=found, within=0.3, digits=2, unit="mm")
        else:
            check.shown(name, source=SOURCE, expected=f"{after} mm", found=f"{found:.2f} mm")
