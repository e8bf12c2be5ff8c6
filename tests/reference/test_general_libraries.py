"""The engine and the averages of the plan against general-purpose libraries."""

import numpy as np
import pytest
import SimpleITK as sitk  # noqa: N813 - its usual name
import statsmodels.api as sm
from scipy import ndimage, signal
from skimage import filters

from evenblur.plan.combining import average
from evenblur.smoothing import smooth_volume
from evenblur.statistics import jackknife
from reference_formulas import FWHM_PER_SIGMA, crossings, moment_width, quadrature

VOXEL_MM = (2.0, 2.0, 3.0)


@pytest.fixture(scope="module")
def volume():
    """Smooth lumps and sharp ones, float64, maximum about 1."""
    rng = np.random.default_rng(7)
    lumps = ndimage.gaussian_filter(rng.random((40, 44, 36)), 2.0)
    lumps = (lumps - lumps.min()) / np.ptp(lumps)
    lumps[12:20, 15:22, 10:20] += 0.5
    lumps[30, 30, 25] += 0.5
    return lumps / lumps.max()


def engine(volume, fwhm_mm):
    return smooth_volume(volume, voxel_mm=VOXEL_MM, fwhm_mm=fwhm_mm).astype(float)


def sigmas(fwhm_mm):
    return [width / FWHM_PER_SIGMA / size for width, size in zip(fwhm_mm, VOXEL_MM, strict=True)]


# From 1.7 voxels of sigma what a sampled kernel folds in is exp(-sigma^2 pi^2 / 2) < 1e-6.
WIDTHS = [(8.0, 8.0, 12.0), (12.0, 12.0, 12.0), (8.0, 10.0, 18.0)]


@pytest.mark.parametrize("fwhm_mm", WIDTHS)
def test_sampled_gaussians(check, volume, fwhm_mm):
    ours, sigma = engine(volume, fwhm_mm), sigmas(fwhm_mm)
    inner = slice(None), slice(None), slice(None)
    results = {
        "scipy.ndimage.gaussian_filter": (ndimage.gaussian_filter(volume, sigma, mode="reflect", truncate=7.0), inner),
        "skimage.filters.gaussian": (filters.gaussian(volume, sigma, mode="mirror", truncate=7.0), None),
    }
    # scikit-image mirrors about the end voxels' centres, and a product of Fourier transforms takes zeros beyond the
    # field: both are compared away from the ends.
    kernel = np.ones((1, 1, 1))
    for axis, s in enumerate(sigma):
        reach = int(np.ceil(7.0 * s))
        weights = np.exp(-0.5 * (np.arange(-reach, reach + 1) / s) ** 2)
        kernel = kernel * np.expand_dims(weights / weights.sum(), [k for k in range(3) if k != axis])
    results["scipy.signal.fftconvolve"] = (signal.fftconvolve(volume, kernel, mode="same"), None)
    far = tuple(
        slice(reach, n - reach) for n, reach in zip(volume.shape, [int(np.ceil(5.0 * s)) for s in sigma], strict=True)
    )
    for name, (theirs, where) in results.items():
        place = far if where is None else where
        assert ours[place].size > 30
        check.inside(
            f"largest difference from {name} over the maximum, widths {', '.join(map(str, fwhm_mm))} mm",
            source=f"general-purpose library: {name}, sampled kernel of at least 1.7 voxels of sigma",
            low=0.0,
            high=5e-6,  # single precision, and weights of 2e-6 that the engine leaves out
            found=float(np.max(np.abs(theirs[place] - ours[place]))),
            digits=7,
        )


def test_sampled_kernels_are_too_narrow_for_small_widths(check):
    # The reason for an engine of one's own, shown on the library's side.
    point = np.zeros(65)
    point[32] = 1.0
    x = np.arange(65.0)
    found = [moment_width(x, ndimage.gaussian_filter1d(point, w / FWHM_PER_SIGMA, truncate=8.0)) for w in (1.0, 1.177)]
    check.close(
        "width that a sampled kernel of 1 and of 1.177 voxels adds to an image, over what it should",
        source="variance of the sampled kernel; poor at fine scales: Lindeberg 2024, J Math Imaging Vis, abstract",
        expected=[0.785, 0.928],
        found=[found[0], found[1] / 1.177],
        within=2e-3,
        digits=3,
    )
    ours = []
    index = np.arange(65.0)
    for width in (1.0, 1.177):
        # What the engine does to slow waves is the width that an image gains.
        wave = np.cos(np.pi * 4 * (index + 0.5) / 65)
        smoothed = smooth_volume(wave[:, None, None], voxel_mm=(1.0, 1.0, 1.0), fwhm_mm=(width, 0.0, 0.0))[:, 0, 0]
        share = float(smoothed @ wave / (wave @ wave))
        ours.append(FWHM_PER_SIGMA * np.sqrt(-2.0 * np.log(share)) / (np.pi * 4 / 65) / width)
    check.close(
        "the same by the engine",
        source="definition of the kernel: exp(-sigma^2 omega^2 / 2)",
        expected=[1.0, 1.0],
        found=ours,
        within=2e-3,
        digits=3,
    )


def simple_itk(filtered):
    return sitk.GetArrayFromImage(filtered).transpose(2, 1, 0).astype(float)


def test_simple_itk(check, volume):
    padded = np.pad(volume, 20)  # with zeros at the ends all rules about ends agree
    image = sitk.GetImageFromArray(np.ascontiguousarray(padded.transpose(2, 1, 0)))
    image.SetSpacing(VOXEL_MM)
    fwhm = (16.0, 16.0, 18.0)
    ours = engine(padded, fwhm)
    variances = [(width / FWHM_PER_SIGMA) ** 2 for width in fwhm]
    # The discrete analogue of the Gaussian: right variance, tails a little heavier than the Gaussian's.
    discrete = sitk.DiscreteGaussian(
        image, variance=variances, maximumKernelWidth=64, maximumError=1e-6, useImageSpacing=True
    )
    recursive = sitk.SmoothingRecursiveGaussian(image, [float(np.sqrt(v)) for v in variances])
    for name, theirs in (("DiscreteGaussian", discrete), ("SmoothingRecursiveGaussian", recursive)):
        check.inside(
            f"largest difference from SimpleITK's {name} over the maximum, widths 16, 16, 18 mm",
            source=f"general-purpose library: SimpleITK {name}, an approximation by its own nature",
            low=0.0,
            high=6e-3,  # so far theirs are from the Gaussian
            found=float(np.max(np.abs(simple_itk(theirs) - ours)) / ours.max()),
            digits=5,
        )


def test_simple_itk_widens_a_point_alike(check):
    x = np.arange(-40, 41) * 2.0
    sharp, width = 9.0, 12.0
    sigma = width / FWHM_PER_SIGMA
    line = np.exp(-0.5 * (x * FWHM_PER_SIGMA / sharp) ** 2)
    point = np.repeat((line[:, None] * line)[..., None], 5, axis=2)
    image = sitk.GetImageFromArray(np.ascontiguousarray(point.transpose(2, 1, 0)))
    image.SetSpacing((2.0, 2.0, 3.0))
    made = [
        simple_itk(sitk.DiscreteGaussian(image, [sigma**2, sigma**2, 1e-9], 128, 1e-7, True)),
        simple_itk(sitk.RecursiveGaussian(sitk.RecursiveGaussian(image, sigma, direction=0), sigma, direction=1)),
        smooth_volume(point, voxel_mm=(2.0, 2.0, 3.0), fwhm_mm=(width, width, 0.0)).astype(float),
    ]
    assert abs(np.sum(made[0]) / np.sum(made[2]) - 1.0) < 1e-4
    halves = [np.diff(crossings(x, m[:, 40, 2] / m[40, 40, 2], 0.5))[0] for m in made[1:]]
    check.close(
        "half-height width of a point of 9 mm after 12 mm by RecursiveGaussian and by the engine",
        source="general-purpose library: SimpleITK; quadrature",
        expected=[quadrature(sharp, width)] * 2,
        found=halves,
        within=0.01,
        digits=3,
        unit="mm",
    )
    # The discrete analogue has exactly the variance asked for, and so a half-height width that is a little short.
    check.close(
        "width by the second moment of a point of 9 mm after 12 mm by DiscreteGaussian and by the engine",
        source="general-purpose library: SimpleITK; quadrature",
        expected=[quadrature(sharp, width)] * 2,
        found=[moment_width(x, m[:, :, 2].sum(axis=1)) for m in (made[0], made[2])],
        within=0.01,
        digits=3,
        unit="mm",
    )


def test_averages_of_phantoms(check):
    # Widths that scatter more than their errors say: the error of the plain mean, by ordinary least squares.
    scattered = np.array([5.31, 5.87, 5.02, 6.11, 5.55])
    ordinary = sm.OLS(scattered, np.ones(5)).fit()
    check.close(
        "mean of five widths and its error from their scatter",
        source="general-purpose library: statsmodels OLS on a constant",
        expected=[ordinary.params[0], ordinary.bse[0]],
        found=average([(w, 0.05) for w in scattered]),
        within=6e-5,  # rounded to 0.0001 mm
        unit="mm",
    )
    # Widths that agree better than their equal errors say: weighted least squares with known weights.
    agreeing, error = np.array([5.50, 5.52, 5.49, 5.51]), 0.12
    weighted = sm.WLS(agreeing, np.ones(4), weights=np.full(4, 1 / error**2)).fit(cov_type="fixed scale")
    check.close(
        "mean of four widths and its error from equal errors",
        source="general-purpose library: statsmodels WLS on a constant, fixed scale",
        expected=[weighted.params[0], weighted.bse[0]],
        found=average([(w, error) for w in agreeing]),
        within=6e-5,
        unit="mm",
    )
    # Unequal errors, equal weights: the plain mean's error is that of an equally weighted sum, and never smaller
    # than that of the best weights.
    errors = np.array([0.05, 0.10, 0.30, 0.20])
    best = sm.WLS(agreeing, np.ones(4), weights=1 / errors**2).fit(cov_type="fixed scale")
    plain = sm.OLS(agreeing, np.ones(4)).fit()
    projector = plain.model.pinv_wexog
    spread = projector @ np.diag(errors**2) @ projector.T
    mean, error_of_mean = average(list(zip(agreeing, errors, strict=True)))
    check.close(
        "mean of four widths and its error from unequal errors, equal weights",
        source="general-purpose library: statsmodels OLS on a constant, its projector applied to known variances",
        expected=[float(plain.params[0]), float(np.sqrt(spread[0, 0]))],
        found=[mean, error_of_mean],
        within=6e-5,
        unit="mm",
    )
    assert error_of_mean > float(best.bse[0])


def test_jackknife_of_a_mean(check):
    values = np.random.default_rng(2).normal(6.0, 0.3, 15)
    error, df = jackknife([np.delete(values, k).mean() for k in range(15)])
    ordinary = sm.OLS(values, np.ones(15)).fit()
    check.close(
        "standard error of a mean by leaving out one, and its degrees of freedom",
        source="general-purpose library: statsmodels OLS on a constant",
        expected=[ordinary.bse[0], ordinary.df_resid],
        found=[float(error), df],
        within=1e-9,
        digits=6,
    )
