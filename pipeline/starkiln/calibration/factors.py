"""Factor analysis of individual stars: what is odd about a star in all its bands together, and what in one alone.

Residuals of star s in band b: ``r_sb = τ a_sb z_s0 + γ z_s1 + Σ_k (Λ_bk0 + Λ_bk1 x_s) z_sk + e_sb`` with z ~ N(0, 1)
and e ~ N(0, u_b² + σ_sb²). The first term is a star whose published temperature is off the scale by τ in ln T, at the
luminosity that was published with it: a_sb is known, ``d ln f_b / d ln T - 4``. The second is one whose luminosity is
off by γ in ln L, which shifts all bands alike. Left out, both would pass for scatter of the bands. x_s is ln T scaled
to the sample, σ the known photometric error.

Expectation-maximisation after Rubin & Thayer 1982, Psychometrika 47, 69, with missing bands, known errors, and the
two-Gaussian mixture per band that the fit of a star uses (Hogg, Bovy & Lang 2010), so that bad photometry stays out of
Λ and u.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]

OUTLIER_FRACTION, OUTLIER_WIDTH = 0.02, 10.0

_ITERATIONS = 1000
_TOLERANCE = 1e-5
_SMALLEST_SCATTER = 0.005
_FIRST_SHIFT = 0.01
_LARGEST_Z = 4.0  # a star beyond is no member of the family that the factors describe
_STUDENT_DOF = 4.0  # of the likelihood that models are compared with: one odd star must not decide


@dataclass(frozen=True, eq=False)
class Sample:
    """Stars to learn from.

    Attributes
    ----------
    teff_k
        (n_stars,): published temperatures [K].
    residual, error
        (n_stars, n_bands): ln of the observed flux over the expected one, NaN where missing, and its known error.
    known
        (n_known, n_bands, n_stars): the patterns that errors of published values leave, of temperature and luminosity.
    """

    teff_k: FloatArray
    residual: FloatArray
    error: FloatArray
    known: FloatArray

    def only(self, stars: NDArray[np.bool_]) -> Sample:
        """Return some of the stars."""
        return Sample(self.teff_k[stars], self.residual[stars], self.error[stars], self.known[:, :, stars])


@dataclass(frozen=True, eq=False)
class Factors:
    """What a factor analysis found.

    Attributes
    ----------
    shift
        (n_known,): scatter of the published temperatures about the scale, τ in ln T, and of the luminosities, γ in
        ln L; empty where neither was asked for.
    coefficient
        (n_factors, 2, n_bands): loadings at the middle of the sample, and their slopes.
    scatter
        (n_bands,): u.
    teff_range_k
        The temperatures [K] of the sample; loadings are held outside.
    """

    shift: FloatArray
    coefficient: FloatArray
    scatter: FloatArray
    teff_range_k: tuple[float, float]

    def loading(self, teff_k: ArrayLike) -> FloatArray:
        """Return Λ at temperatures [K], of shape (n_factors, n_bands, n)."""
        x = _scaled(np.atleast_1d(np.asarray(teff_k, dtype=np.float64)), self.teff_range_k)
        return self.coefficient[:, 0, :, np.newaxis] + self.coefficient[:, 1, :, np.newaxis] * x

    def loadings_of(self, sample: Sample) -> FloatArray:
        """Return a sample's loadings, of the known patterns first, (n_known + n_factors, n_bands, n_stars)."""
        return np.concatenate([self.shift[:, np.newaxis, np.newaxis] * sample.known, self.loading(sample.teff_k)])


def learn_factors(
    teff_k: FloatArray, residual: FloatArray, error: FloatArray, n_factors: int, slope: FloatArray | None = None
) -> Factors:
    """Return the factors of stars' residuals.

    Parameters
    ----------
    teff_k : ndarray
        (n_stars,) published temperatures [K].
    residual, error : ndarray
        (n_stars, n_bands): ln of the observed flux over the expected one, NaN where missing, and its known error.
    n_factors : int
        How many factors to look for.
    slope : ndarray, optional
        (n_stars, n_bands): d ln f / d ln T at constant luminosity, a. If given, the scatter of the published
        temperatures and luminosities about the scale is found beside the factors; else it is a part of them.
    """
    return _learn(_sample(teff_k, residual, error, slope), n_factors)


def choose_n_factors(
    teff_k: FloatArray,
    residual: FloatArray,
    error: FloatArray,
    largest: int = 2,
    folds: int = 5,
    slope: FloatArray | None = None,
) -> tuple[int, list[float]]:
    """Return the number of factors that predicts left-out stars best, and the mean log-likelihood of each number."""
    sample = _sample(teff_k, residual, error, slope)
    fold = np.arange(len(teff_k)) % folds
    scores = []
    for n_factors in range(largest + 1):
        total = 0.0
        for left_out in range(folds):
            found = _learn(sample.only(fold != left_out), n_factors)
            total += float(np.sum(ln_likelihood(found, sample.only(fold == left_out))))
        scores.append(total / len(teff_k))
    return int(np.argmax(scores)), scores


def _learn(sample: Sample, n_factors: int) -> Factors:
    found = _expectation_maximisation(sample, n_factors)
    mean, _ = _posterior(found.loadings_of(sample), found.scatter, sample, _all_trusted(sample))
    member = np.all(np.abs(mean) < _LARGEST_Z, axis=1)
    return found if np.all(member) else _expectation_maximisation(sample.only(member), n_factors)


def _sample(teff_k: FloatArray, residual: FloatArray, error: FloatArray, slope: FloatArray | None) -> Sample:
    patterns = [] if slope is None else [slope.T, np.ones_like(slope.T)]
    return Sample(teff_k, residual, error, np.array(patterns).reshape(len(patterns), *residual.T.shape))


def ln_likelihood(factors: Factors, sample: Sample) -> FloatArray:
    """Return each star's log-likelihood, Student's t with 4 degrees of freedom about the factors' covariance.

    What shifts all bands of a star alike is left out, as (R/d)² is free in a fit: only differences between bands count.
    """
    from scipy.special import gammaln

    dof = _STUDENT_DOF
    result = np.zeros(len(sample.teff_k))
    loadings = factors.loadings_of(sample)
    for star in range(len(result)):
        known = np.isfinite(sample.residual[star])
        contrast = _contrasts(int(known.sum()))
        loading = contrast @ loadings[:, known, star].T
        own = contrast @ np.diag(factors.scatter[known] ** 2 + sample.error[star, known] ** 2) @ contrast.T
        scale = (loading @ loading.T + own) * (dof - 2.0) / dof
        miss = contrast @ sample.residual[star, known]
        n = len(miss)
        distance = miss @ np.linalg.solve(scale, miss)
        result[star] = gammaln(0.5 * (dof + n)) - gammaln(0.5 * dof) - 0.5 * n * np.log(dof * np.pi)
        result[star] -= 0.5 * np.linalg.slogdet(scale)[1] + 0.5 * (dof + n) * np.log1p(distance / dof)
    return result


def _contrasts(n_bands: int) -> FloatArray:
    """Return n - 1 orthonormal combinations of n bands that a common shift does not change (Helmert)."""
    matrix = np.zeros((max(n_bands - 1, 0), n_bands))
    for row in range(len(matrix)):
        matrix[row, : row + 1] = 1.0
        matrix[row, row + 1] = -(row + 1.0)
        matrix[row] /= np.sqrt((row + 1.0) * (row + 2.0))
    return matrix


def _expectation_maximisation(sample: Sample, n_factors: int) -> Factors:
    found = _start(sample, n_factors)
    trust = _all_trusted(sample)
    for _ in range(_ITERATIONS):
        loadings = found.loadings_of(sample)
        mean, covariance = _posterior(loadings, found.scatter, sample, trust)
        trust = _trust(loadings, found.scatter, sample, mean, covariance)
        renewed = _maximise(found, sample, trust, mean, covariance)
        change = max(
            float(np.max(np.abs(renewed.shift - found.shift), initial=0.0)),
            float(np.max(np.abs(renewed.scatter - found.scatter))),
            float(np.max(np.abs(renewed.coefficient - found.coefficient), initial=0.0)),
        )
        found = renewed
        if change < _TOLERANCE:
            break
    return found


def _start(sample: Sample, n_factors: int) -> Factors:
    """Return a first guess: the leading patterns of the residuals, missing ones taken as zero, tails cut."""
    scale = 1.4826 * np.nanmedian(np.abs(sample.residual), axis=0)
    filled = np.clip(np.nan_to_num(sample.residual), -3.0 * scale, 3.0 * scale)
    _, singular, patterns = np.linalg.svd(filled / scale, full_matrices=False)
    strength = singular[:n_factors] / np.sqrt(len(filled))
    coefficient = np.zeros((n_factors, 2, filled.shape[1]))
    coefficient[:, 0] = strength[:, np.newaxis] * patterns[:n_factors] * scale
    teff_range_k = (float(sample.teff_k.min()), float(sample.teff_k.max()))
    return Factors(np.full(len(sample.known), _FIRST_SHIFT), coefficient, 0.5 * scale + _SMALLEST_SCATTER, teff_range_k)


def _posterior(
    loadings: FloatArray, scatter: FloatArray, sample: Sample, trust: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return mean (n_stars, n_known + n_factors) and covariance of each star's z."""
    weight = trust / (scatter**2 + np.nan_to_num(sample.error) ** 2)
    precision = np.einsum("jbs,sb,kbs->sjk", loadings, weight, loadings) + np.eye(len(loadings))
    covariance = np.linalg.inv(precision)
    mean = np.einsum("sjk,kbs,sb->sj", covariance, loadings, weight * np.nan_to_num(sample.residual))
    return mean, covariance


def _trust(
    loadings: FloatArray, scatter: FloatArray, sample: Sample, mean: FloatArray, covariance: FloatArray
) -> FloatArray:
    """Return how much each band of each star counts: less for a likely outlier, whose variance is the wide one."""
    miss = sample.residual - np.einsum("kbs,sk->sb", loadings, mean)
    square = miss**2 + np.einsum("jbs,sjk,kbs->sb", loadings, covariance, loadings)
    square /= scatter**2 + sample.error**2
    ratio = OUTLIER_FRACTION / (1.0 - OUTLIER_FRACTION) / OUTLIER_WIDTH
    odds = ratio * np.exp(np.minimum(0.5 * square * (1.0 - OUTLIER_WIDTH**-2), 500.0))
    wide = odds / (1.0 + odds)
    return np.where(np.isfinite(sample.residual), 1.0 - wide + wide / OUTLIER_WIDTH**2, 0.0)


def _maximise(found: Factors, sample: Sample, trust: FloatArray, mean: FloatArray, covariance: FloatArray) -> Factors:
    """Return the factors that the stars' z ask for: loadings, then the shifts, then the scatters."""
    x = _scaled(sample.teff_k, found.teff_range_k)
    second = covariance + mean[:, :, np.newaxis] * mean[:, np.newaxis, :]
    residual, variance = np.nan_to_num(sample.residual), np.nan_to_num(sample.error) ** 2
    weight = trust / (found.scatter**2 + variance)
    coefficient = _best_loadings(found, sample, weight, residual, x, mean, second)
    factors = Factors(found.shift, coefficient, found.scatter, found.teff_range_k)
    shift = _best_shifts(factors, sample, weight, residual, mean, second)
    factors = Factors(shift, coefficient, found.scatter, found.teff_range_k)
    loadings = factors.loadings_of(sample)
    left = residual**2 - 2.0 * residual * np.einsum("kbs,sk->sb", loadings, mean)
    left += np.einsum("jbs,sjk,kbs->sb", loadings, second, loadings)
    # The part of e that is a band's own: its mean square given e, photometric noise taken out.
    share = found.scatter**2 / (found.scatter**2 + variance)
    known = np.isfinite(sample.residual)
    own = np.where(known, share**2 * trust * left + share * variance, 0.0).sum(axis=0) / known.sum(axis=0)
    return Factors(shift, coefficient, np.maximum(np.sqrt(own), _SMALLEST_SCATTER), found.teff_range_k)


def _best_loadings(
    found: Factors,
    sample: Sample,
    weight: FloatArray,
    residual: FloatArray,
    x: FloatArray,
    mean: FloatArray,
    second: FloatArray,
) -> FloatArray:
    """Return the coefficients of the free factors: per band a weighted regression on (z, x z), the shifts taken out."""
    n_factors, n_known = len(found.coefficient), len(sample.known)
    free = second[:, n_known:, n_known:]
    shifted = np.einsum("k,kbs,skj->bsj", found.shift, sample.known, second[:, :n_known, n_known:])
    powers = x[:, np.newaxis] ** np.arange(3)
    coefficient = np.empty_like(found.coefficient)
    for band in range(len(found.scatter) if n_factors else 0):
        target = mean[:, n_known:] * residual[:, [band]] - shifted[band]
        parts = [np.einsum("s,sij->ij", weight[:, band] * powers[:, power], free) for power in range(3)]
        normal = np.block([[parts[0], parts[1]], [parts[1], parts[2]]]) + 1e-6 * np.eye(2 * n_factors)
        right = np.concatenate([(weight[:, band] * powers[:, power]) @ target for power in range(2)])
        coefficient[:, :, band] = np.linalg.solve(normal, right).reshape(2, n_factors).T
    return coefficient


def _best_shifts(
    found: Factors, sample: Sample, weight: FloatArray, residual: FloatArray, mean: FloatArray, second: FloatArray
) -> FloatArray:
    """Return the size of each known pattern in turn, the other terms taken out."""
    shift = found.shift.copy()
    for place, pattern in enumerate(sample.known):
        own = np.zeros(len(shift))
        own[place] = shift[place]
        others = Factors(shift - own, found.coefficient, found.scatter, found.teff_range_k).loadings_of(sample)
        taken = np.einsum("kbs,sk->sb", others, second[:, :, place])
        weighted = weight * pattern.T
        below = float(np.sum(weighted * pattern.T * second[:, [place], place]))
        shift[place] = np.sum(weighted * (residual * mean[:, [place]] - taken)) / below if below > 0.0 else 0.0
    return shift


def _all_trusted(sample: Sample) -> FloatArray:
    return np.isfinite(sample.residual).astype(np.float64)


def _scaled(teff_k: FloatArray, teff_range_k: tuple[float, float]) -> FloatArray:
    """Return ln T from -1 to 1 over the sample, held outside."""
    low, high = np.log(teff_range_k)
    return np.clip((np.log(teff_k) - 0.5 * (low + high)) / (0.5 * (high - low)), -1.0, 1.0)
