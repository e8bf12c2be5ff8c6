"""Profile of a disc (a cylinder seen along its axis) blurred by a Gaussian: exact, and as a fast table.

A point at distance rho from the centre gets P(|X| < R), where X is normal about that point: the non-central chi-square
distribution with two degrees of freedom at R² / sigma² with non-centrality rho² / sigma².
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ndtr

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(40)


def disc_profile(distance_mm: ArrayLike, *, radius_mm: float, sigma_mm: float) -> NDArray[np.float64]:
    """Value at a distance from the axis of a disc of activity 1 that is blurred by an isotropic Gaussian.

    Parameters
    ----------
    distance_mm
        Distances from the centre, mm, any shape.
    radius_mm, sigma_mm
        Radius of the disc and sigma of the Gaussian, mm.

    Returns
    -------
    ndarray
        Values between 0 and 1, shape of `distance_mm`.

    Raises
    ------
    ValueError
        If radius or sigma is not positive.

    Notes
    -----
    Equals scipy.stats.ncx2.cdf(R² / sigma², 2, rho² / sigma²), here as one integral over the chords of the disc, each
    an exact difference of two normal distributions. That is faster, and stays exact for large R / sigma.

    Examples
    --------
    At the centre the value is 1 − exp(−R² / (2 sigma²)):

    >>> float(disc_profile(0.0, radius_mm=8.0, sigma_mm=4.0).round(6)), round(1 - np.exp(-2.0), 6)
    (0.864665, np.float64(0.864665))
    """
    if radius_mm <= 0.0 or sigma_mm <= 0.0:
        raise ValueError(f"radius_mm and sigma_mm must be positive, got {radius_mm} and {sigma_mm}")
    distance = np.asarray(distance_mm, dtype=np.float64)
    # Chords at height y = R sin(t): the substitution takes away the square root's vertical slope at |y| = R.
    widest = np.arcsin(min(1.0, 8.5 * sigma_mm / radius_mm))
    angle = widest * _NODES
    height, half = radius_mm * np.sin(angle), radius_mm * np.cos(angle)
    share = widest * _WEIGHTS * half * np.exp(-0.5 * (height / sigma_mm) ** 2) / (sigma_mm * np.sqrt(2.0 * np.pi))
    across = distance[..., None]
    inside = ndtr((half - across) / sigma_mm) - ndtr((-half - across) / sigma_mm)
    return np.asarray(inside @ share)


@dataclass(frozen=True)
class DiscTable:
    """The profile in u = (rho − R) / sigma, tabulated for three sigmas of one radius; linear in u between the nodes.

    In u the profile hardly depends on sigma (a straight edge does not at all), so a parabola through three sigmas
    is exact to far below the noise of any image.
    """

    radius_mm: float
    sigma_mm: float
    lowest: float
    step: float
    terms: NDArray[np.float64]  # (3, nodes): constant, linear and square term in sigma − sigma_mm
    radius_term: NDArray[np.float64]  # (nodes,): derivative by the radius at fixed u

    @classmethod
    def build(cls, *, radius_mm: float, sigma_low_mm: float, sigma_high_mm: float, step: float = 0.02) -> "DiscTable":
        """Tabulate for a radius and a range of sigmas (mm)."""
        middle = 0.5 * (sigma_low_mm + sigma_high_mm)
        spread = max(0.5 * (sigma_high_mm - sigma_low_mm), 0.02 * middle)
        spread = min(spread, 0.9 * middle)
        lowest = -min(8.0, radius_mm / max(sigma_low_mm, 1e-6) + 1.0)
        u = np.arange(lowest, 8.0 + step, step)

        # How the profile changes with sigma and radius at fixed u is smooth and small: every fifth node tells it.
        coarse = np.append(u[::5], u[-1] + step)

        def change(values: NDArray[np.float64]) -> NDArray[np.float64]:
            return np.asarray(np.interp(u, coarse, values))

        def rough(radius: float, sigma: float) -> NDArray[np.float64]:
            return disc_profile(np.abs(radius + coarse * sigma), radius_mm=radius, sigma_mm=sigma)

        low, centre, high = (rough(radius_mm, s) for s in (middle - spread, middle, middle + spread))
        terms = np.stack(
            [
                disc_profile(np.abs(radius_mm + u * middle), radius_mm=radius_mm, sigma_mm=middle),
                change((high - low) / (2 * spread)),
                change((high + low - 2 * centre) / (2 * spread**2)),
            ]
        )
        by_radius = change((rough(radius_mm * 1.01, middle) - rough(radius_mm * 0.99, middle)) / (0.02 * radius_mm))
        return cls(radius_mm, middle, lowest, step, terms, by_radius)

    def evaluate(
        self, distance: NDArray[np.float64], sigma: NDArray[np.float64] | float, radius: NDArray[np.float64] | float
    ) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """Values and derivatives by distance, sigma and radius, all of the shape of `distance` (mm).

        `radius` may differ a little from the table's own; beyond the table the values are those of its ends.
        """
        u = (distance - radius) / sigma
        place = np.clip((u - self.lowest) / self.step, 0.0, self.terms.shape[1] - 1.001)
        node = place.astype(np.intp)
        part = place - node
        offset = sigma - self.sigma_mm
        if np.ndim(sigma) == 0:
            line = self.terms[0] + offset * (self.terms[1] + offset * self.terms[2])
            rise = np.diff(line, append=line[-1])
            value, slope = line[node] + part * rise[node], rise[node] / self.step
            line = self.terms[1] + 2.0 * offset * self.terms[2]
            by_sigma = line[node]
        else:
            low, high = self.terms[:, node], self.terms[:, node + 1]
            both = low + part * (high - low)
            value = both[0] + offset * (both[1] + offset * both[2])
            change = high - low
            slope = (change[0] + offset * (change[1] + offset * change[2])) / self.step
            by_sigma = both[1] + 2.0 * offset * both[2]
        return value, slope / sigma, by_sigma - slope * u / sigma, self.radius_term[node] - slope / sigma
