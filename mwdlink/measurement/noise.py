"""How noisy a sweep is, and what a misfit far from the noise means.

Two estimates that share no assumption: the residuals of the best positive modes (which must obey
Kramers-Kronig), and the roughness of each curve on its own (which need not). Where the first is
much larger than the second, the curves are smooth but do not belong together.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.stats import chi2 as chi2_law

from mwdlink.errors import InputError
from mwdlink.measurement.modes import ModeFit, fit_on_grid
from mwdlink.measurement.sweep import Sweep
from mwdlink.quantity import Uncertain

# No rotational rheometer measures moduli of a melt better than this, however smooth the curve:
# gap, calibration and temperature are common to all points (common practice).
FLOOR = 0.01
# A residual this many robust standard deviations out is left out of the noise estimate.
OUTLIER = 4.5


@dataclass(frozen=True)
class NoiseEstimate:
    """Relative noise of a sweep.

    Attributes
    ----------
    relative : Uncertain
        Relative standard error of one modulus at one frequency [-]; at least 0.01.
    raw : float
        The same before the floor of 0.01 [-].
    roughness : float or None
        Estimate from each curve's own roughness, without any relaxation model [-]; None
        where the points are too few or too sparse for it.
    degrees_of_freedom : int
        Data less modes in use.
    outliers : tuple of int
        Indices of points left out of the estimate.
    modes : ModeFit
        The positive modes behind it.
    """

    relative: Uncertain
    raw: float
    roughness: float | None
    degrees_of_freedom: int
    outliers: tuple[int, ...]
    modes: ModeFit

    @property
    def value(self) -> float:
        """The relative noise to use [-]."""
        return float(self.relative.value or FLOOR)

    def text(self) -> str:
        """The estimate in words."""
        low, high = self.relative.low, self.relative.high
        words = (
            f"The noise was estimated as {100 * self.value:.1f} % of each modulus "
            f"({100 * (low or 0):.1f} to {100 * (high or 0):.1f} %), from what the best positive "
            "relaxation spectrum leaves over."
        )
        if self.raw < FLOOR:
            words += (
                f" The residuals are only {100 * self.raw:.2f} %, but no less than "
                f"{100 * FLOOR:.0f} % is assumed: gap, calibration and temperature errors are "
                "common to all points and do not show as scatter."
            )
        return words


def estimate_noise(sweep: Sweep, *, level: float = 0.9) -> NoiseEstimate:
    """Relative noise from the residuals of the best positive-mode fit.

    Parameters
    ----------
    sweep : Sweep
        At least four frequencies.
    level : float
        Probability of the interval, from the chi-square law of the residual variance.

    Returns
    -------
    NoiseEstimate

    Raises
    ------
    InputError
        If the sweep has fewer than four points.
    NotConverged

    Notes
    -----
    Residual variance over N - k degrees of freedom, k the modes in use (the free set of the
    non-negative fit: the others sit at their bound and fit no noise). Points further out than 4.5
    robust standard deviations are left out, once each round, for at most three rounds.
    """
    if len(sweep) < 4:
        raise InputError(
            f"{len(sweep)} points are too few to estimate their noise.",
            path=sweep.path,
            remedy="State the noise (relative, for example 0.02), or give more points.",
        )
    return _estimate(
        sweep.omega.tobytes(), sweep.storage.tobytes(), sweep.loss.tobytes(), float(level)
    )


# the fit and the checks ask for it of the same sweep
@lru_cache(maxsize=4)
def _estimate(omega: bytes, storage: bytes, loss: bytes, level: float) -> NoiseEstimate:
    sweep = Sweep(
        omega=np.frombuffer(omega), storage=np.frombuffer(storage), loss=np.frombuffer(loss)
    )
    keep = np.ones((2, len(sweep)), dtype=bool)
    fit = _fit(sweep, np.where(keep, 1.0, 1e6))
    for _ in range(3):
        residual = _relative_misfit(sweep, fit)
        spread = 1.4826 * np.median(np.abs(residual[keep]))
        spread *= np.sqrt(keep.sum() / max(keep.sum() - fit.free, 1))
        out = np.abs(residual) > OUTLIER * max(spread, 1e-6)
        # never throw more than a tenth away: then it is not outliers but a misfit
        if out.sum() > 0.1 * out.size or np.array_equal(out, ~keep):
            break
        keep = ~out
        fit = _fit(sweep, np.where(keep, 1.0, 1e6))
    residual = _relative_misfit(sweep, fit)
    count = int(keep.sum())
    freedom = max(count - fit.free, 1)
    square = float(np.sum(residual[keep] ** 2))
    raw = float(np.sqrt(square / freedom))
    tails = chi2_law.ppf([(1 + level) / 2, (1 - level) / 2], freedom)
    low, high = (float(x) for x in np.sqrt(square / tails))
    relative = Uncertain(max(raw, FLOOR), max(low, FLOOR), max(high, FLOOR), level)
    outliers = tuple(int(i) for i in np.flatnonzero(~keep.all(axis=0)))
    return NoiseEstimate(relative, raw, roughness(sweep), freedom, outliers, fit)


def _fit(sweep: Sweep, sigma: np.ndarray) -> ModeFit:
    return fit_on_grid(sweep.omega, sweep.storage, sweep.loss, sigma[0], sigma[1])


def _relative_misfit(sweep: Sweep, fit: ModeFit) -> np.ndarray:
    """(data - fit)/fit, shape (2, n)."""
    return np.vstack([sweep.storage / fit.storage - 1.0, sweep.loss / fit.loss - 1.0])


def roughness(sweep: Sweep) -> float | None:
    """Relative noise from each curve alone: the misfit of a local cubic through six neighbours.

    Parameters
    ----------
    sweep : Sweep

    Returns
    -------
    float or None
        [-]; None with fewer than eight points or fewer than four a decade.

    Notes
    -----
    Every point of ln G against ln omega is predicted by the cubic through its three neighbours on
    either side and compared with it; the variance of prediction and point together is known from
    the geometry [derived]. Points beyond three and a half
    robust deviations do not count, so that single bad points do not matter.
    """
    x = np.log(sweep.omega)
    # sparser than four a decade, the curve's own bends look like noise [measured]
    if x.size < 8 or np.median(np.diff(x)) > np.log(10) / 3.9:
        return None
    i = np.arange(3, x.size - 3)
    near = i[:, None] + np.array([-3, -2, -1, 1, 2, 3])
    away = (x[near] - x[i][:, None])[:, :, None] ** np.arange(4)
    # weights of the prediction at the middle: first row of the pseudo-inverse
    c = np.linalg.pinv(away)[:, 0, :]
    norm = np.sqrt(1.0 + np.sum(c * c, axis=1))
    y = np.log([sweep.storage, sweep.loss])
    square = np.square((y[:, i] - np.sum(c * y[:, near], axis=2)) / norm).ravel()
    # 0.4549 is the median of a chi-square with one degree of freedom
    middle = float(np.median(square)) / 0.4549
    # the plain mean of all but far points scatters less than the median; a normal law loses 1.1 %
    # of its squares beyond three and a half deviations
    kept = square[square <= 3.5**2 * middle]
    return float(np.sqrt(np.mean(kept)))


@dataclass(frozen=True)
class Weights:
    """The relative standard errors a fit is made with, and where they came from.

    Attributes
    ----------
    sigma_storage, sigma_loss : ndarray of shape (n,)
        [-]
    source : str
        "columns", "given" or "estimated".
    estimate : NoiseEstimate or None
        The estimate, where it was made.
    """

    sigma_storage: np.ndarray
    sigma_loss: np.ndarray
    source: str
    estimate: NoiseEstimate | None = None

    @property
    def typical(self) -> float:
        """Median relative standard error [-]."""
        return float(np.median(np.concatenate([self.sigma_storage, self.sigma_loss])))


def noise_of(sweep: Sweep, noise: float | None = None) -> Weights:
    """Relative errors from a given number, the file's columns or an estimate, in that order.

    Raises
    ------
    InputError
        If the given noise is not between 0 and 1.
    """
    ones = np.ones(len(sweep))
    if noise is not None:
        if not 0 < noise < 1:
            raise InputError(
                f"a relative noise of {noise:g} makes no sense.",
                remedy="Give a fraction: 0.02 for 2 %.",
            )
        return Weights(noise * ones, noise * ones, "given")
    if sweep.sigma_storage is not None or sweep.sigma_loss is not None:
        up = sweep.sigma_storage if sweep.sigma_storage is not None else sweep.sigma_loss
        out = sweep.sigma_loss if sweep.sigma_loss is not None else sweep.sigma_storage
        return Weights(np.asarray(up, dtype=float), np.asarray(out, dtype=float), "columns")
    estimate = estimate_noise(sweep)
    return Weights(estimate.value * ones, estimate.value * ones, "estimated", estimate)


def chi2_in_words(chi2_per_point: float, degrees_of_freedom: int, source: str) -> str:
    """What a chi2 per point means; empty when it is as it should be.

    Parameters
    ----------
    chi2_per_point : float
        chi2 over the degrees of freedom [-].
    degrees_of_freedom : int
    source : str
        Where the errors came from: "columns", "given" or "estimated".

    Returns
    -------
    str
    """
    freedom = max(int(degrees_of_freedom), 1)
    low, high = chi2_law.ppf([0.001, 0.999], freedom) / freedom
    size = np.sqrt(chi2_per_point)
    origin = {
        "columns": "the errors in the file's own columns",
        "given": "the noise that was given",
        "estimated": "the noise that was estimated from the sweep",
    }[source]
    if chi2_per_point > high:
        return (
            f"The misfit is {size:.1f} times {origin} (chi2 per point {chi2_per_point:.2g}, "
            f"chance alone reaches {high:.2g}). Either the errors are larger than stated, or the "
            "curves do not belong together or do not follow the model: look where the residuals "
            "have one sign over many neighbouring points (model or drift) and where single points "
            "stand out (bad readings)."
        )
    if chi2_per_point < low:
        if source == "estimated":
            return (
                f"The misfit is only {size:.2f} times {origin}: either the curve is smoother than "
                "the floor of 1 % that is assumed in any case, or the scatter was estimated too "
                "large, as it is where the two moduli do not belong together. Intervals are wide "
                "rather than narrow."
            )
        return (
            f"The misfit is only {size:.2f} times {origin} (chi2 per point {chi2_per_point:.2g}, "
            f"chance alone stays above {low:.2g}): the stated errors are too large, or the curves "
            "were smoothed before they came here. Intervals are wider than they need be."
        )
    return ""
