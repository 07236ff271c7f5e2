"""Averages straight from the relaxation spectrum: two cross-checks that share no code with the fit.

Both start from positive modes fitted here to the sweep, and from the bare viscosity law
eta0 = K M^a. Neither knows nodes, lumps, priors or the Rouse part, so each has a bias of its own;
the biases are tabulated below, and only a disagreement beyond them means anything.

*Spectrum relation.* w(ln M) = (1/beta)(a/G_N)^(1/beta) h [int_M^inf h dlnM']^(1/beta-1) with
h = H(tau(M)) is the derivative of W_above(M) = (int_tau(M)^inf H dln tau / G_N)^(1/beta), which
needs no density: the weight above M is a power of the modulus that relaxes after tau(M). Time and
molar mass are tied by tau = K M^a/G_N whatever the kernel.

*Moments.* With S(t) = (G/G_N)^(1/beta) = int F(t; M)^(1/beta) dW and a scale-free kernel,
int t^(s-1) S dt = int w tau(M)^s dM x int z^(s-1) F^(1/beta) dz, so s = 1/a and 2/a give Mw and
Mw Mz without any inversion.

References
----------
.. [1] W. Thimm, C. Friedrich, M. Marth, J. Honerkamp, J. Rheol. 43 (1999) 1663 (published).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.optimize import nnls

from mwdlink.chains.melt import Melt
from mwdlink.errors import Caution
from mwdlink.relaxation.kernels import power_law_decay, tube_survival
from mwdlink.relaxation.mixing import Model
from mwdlink.relaxation.spectrum import Spectrum

MODES_PER_DECADE = 10
# decades of tau beyond 1/omega_max and 1/omega_min: an end mode must be able to act as a pure
# viscosity or a pure modulus
BELOW, BEYOND = 1.5, 1.0
# a moment more of which than this comes from times beyond 1/omega_min is not reported
LONGEST_SHARE = 0.35
# weight that has relaxed before 1/omega_max, of the molar mass whose time that is
UNSEEN = 0.2

# ln(way/truth), lowest and highest, over log-normal, Schulz-Zimm and two-part melts of dispersity
# 1.5 to 4, beta = 2, Rouse part on, four to six decades of frequency at 5 points a decade and 3 %
# noise, widened by about a third (exact data: tests/benchmarks/bias_table.py)
RELATION_BIAS: Mapping[str, Mapping[str, tuple[float, float]]] = {
    "exponential": {"Mw": (0.07, 0.19), "Mz": (-0.08, 0.24)},
    "reptation": {"Mw": (0.05, 0.18), "Mz": (-0.05, 0.29)},
    "power-law": {"Mw": (0.03, 0.15), "Mz": (0.04, 0.42)},
}
MOMENT_BIAS: Mapping[str, tuple[float, float]] = {"Mw": (-0.04, 0.07), "Mz": (-0.19, 0.15)}


@dataclass(frozen=True)
class CrossCheck:
    """Averages by the two closed ways.

    Attributes
    ----------
    spectrum_relation, moments : mapping
        `Mw_g_per_mol` and `Mz_g_per_mol` [g/mol]; None where the way does not exist (moments of
        a kernel that is not scale-free) or leans on times that were not measured.
    kernel : str
        The kernel whose biases apply.
    """

    spectrum_relation: Mapping[str, float | None]
    moments: Mapping[str, float | None]
    kernel: str

    def to_dict(self) -> dict[str, dict[str, float | None]]:
        """For the result: the two ways and their averages."""
        return {
            "spectrum_relation": dict(self.spectrum_relation),
            "moments": dict(self.moments),
        }

    def cautions(
        self,
        Mw: tuple[float, float] | None,
        Mz: tuple[float, float] | None = None,
        weight_above: float = 0.0,
    ) -> tuple[Caution, ...]:
        """Disagreements with the fit beyond the known bias.

        Parameters
        ----------
        Mw, Mz : (float, float) or None
            The fit's interval [g/mol]; None leaves an average out.
        weight_above : float
            Weight the fit puts above the window [-]: with more than 1 % there the averages of
            the fit are lower bounds, and only a cross-check below them is said.
        """
        out = []
        for way, values, bias in (
            ("spectrum relation", self.spectrum_relation, RELATION_BIAS.get(self.kernel)),
            ("moments", self.moments, MOMENT_BIAS),
        ):
            for name, span in (("Mw", Mw), ("Mz", Mz)):
                value = values.get(f"{name}_g_per_mol")
                if span is None or value is None or not bias:
                    continue
                low, high = bias[name]
                floor, ceiling = span[0] * np.exp(low), span[1] * np.exp(high)
                too_high = value > ceiling and weight_above < 0.01
                if value < floor or too_high:
                    own = " to ".join(dict.fromkeys(f"{s:.3g}" for s in span))
                    out.append(
                        Caution(
                            "cross_check_disagrees",
                            f"{name} by the {way} is {value:.3g} g/mol; the fit's {own} g/mol "
                            "and the known bias of that way "
                            f"allow {floor:.3g} to {ceiling:.3g}. Look at the fit, the noise and "
                            "the ends of the sweep.",
                        )
                    )
        return tuple(out)


def cross_check(
    omega: np.ndarray,
    storage: np.ndarray,
    loss: np.ndarray,
    sigma: np.ndarray | float,
    melt: Melt,
    model: Model,
    spectrum: Spectrum | None = None,
) -> CrossCheck:
    """Mw and Mz of a sweep by the spectrum relation and by moments.

    Parameters
    ----------
    omega, storage, loss : ndarray of shape (n,)
        [rad/s], [Pa], [Pa], > 0.
    sigma : float or ndarray of shape (2 n,)
        Relative noise of G' over that of G'' [-].
    melt : Melt
    model : Model
    spectrum : Spectrum, optional
        Positive modes to use instead of those fitted here.

    Returns
    -------
    CrossCheck
    """
    omega = np.asarray(omega, dtype=float)
    modes = spectrum or smooth_modes(omega, storage, loss, sigma)
    shortest, longest = 1.0 / float(np.max(omega)), 1.0 / float(np.min(omega))
    return CrossCheck(
        relation_averages(modes, melt, model.exponent, shortest),
        moment_averages(modes, melt, model, shortest, longest),
        model.kernel,
    )


# -- positive modes of a sweep -----------------------------------------------------------------
def smooth_modes(
    omega: np.ndarray, storage: np.ndarray, loss: np.ndarray, sigma: np.ndarray | float
) -> Spectrum:
    """Positive modes on a dense grid, as smooth as the noise allows.

    Non-negative least squares on both moduli; a penalty on the second difference of H over its own
    local size is raised until chi2 has grown by what noise alone makes it vary, sqrt(2 N).
    """
    w = np.asarray(omega, dtype=float)
    data = np.concatenate([storage, loss]).astype(float)
    noise = np.broadcast_to(np.asarray(sigma, dtype=float), data.shape)
    low, high = -np.log10(w.max()) - BELOW, -np.log10(w.min()) + BEYOND
    tau = np.logspace(low, high, int(np.ceil((high - low) * MODES_PER_DECADE)) + 1)
    x = np.outer(w, tau)
    rows = np.vstack([x * x, x]) / np.vstack([1 + x * x, 1 + x * x])
    rows = rows / (data * noise)[:, None]
    target = 1.0 / noise
    # |G*| at 1/tau is the local size of H: scaled by it every unknown is of order one
    size = np.hypot(data[: w.size], data[w.size :])
    scale = np.exp(np.interp(-np.log(tau), np.log(w), np.log(size)))
    # beyond the data H has no reason to stay level: let it fall by a decade a decade
    scale = scale * np.minimum(1.0, (1.0 / w.min()) / tau)
    rows = rows * scale
    bend = np.diff(np.eye(tau.size), n=2, axis=0)
    free = _non_negative(rows, target)
    allowed = float(np.sum((rows @ free - target) ** 2)) + np.sqrt(2.0 * data.size)
    best = free
    strengths = np.geomspace(1e-3, 3e3, 12)
    # the misfit grows with the strength: halving finds the last one that is allowed
    low_end, high_end = 0, strengths.size
    while low_end < high_end:
        middle = (low_end + high_end) // 2
        x_s = _non_negative(
            np.vstack([rows, strengths[middle] * bend]),
            np.concatenate([target, np.zeros(len(bend))]),
        )
        if float(np.sum((rows @ x_s - target) ** 2)) > allowed:
            high_end = middle
        else:
            best, low_end = x_s, middle + 1
    held = best > 0
    return Spectrum(tau[held], (best * scale)[held])


def _non_negative(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    q, r = np.linalg.qr(np.column_stack([a, b]))
    try:
        return nnls(r[:, :-1], r[:, -1], maxiter=40 * a.shape[1])[0]
    except RuntimeError:
        # the active set went round in circles: a tiny ridge ends it
        ridge = 1e-6 * np.linalg.norm(r) * np.eye(a.shape[1])
        wide = np.vstack([r[:, :-1], ridge])
        return nnls(wide, np.concatenate([r[:, -1], np.zeros(a.shape[1])]), maxiter=400 * len(b))[0]


# -- the spectrum relation -----------------------------------------------------------------------
def relation_averages(
    spectrum: Spectrum, melt: Melt, exponent: float, shortest: float = 0.0
) -> dict[str, float | None]:
    """Mw and Mz [g/mol] by the spectrum relation.

    The modulus that relaxes after a time is turned into the weight above a molar mass at the
    edges between modes. Modulus beyond G_N (Rouse modes) is cut off.

    Parameters
    ----------
    spectrum : Spectrum
    melt : Melt
    exponent : float
        beta.
    shortest : float
        1/omega_max [s]: what the spectrum does not hold of G_N has relaxed before; that weight is
        counted at `UNSEEN` of the molar mass of this time.
    """
    tau, g = spectrum.tau, spectrum.strength
    later = np.cumsum(g[::-1])[::-1]
    above = np.minimum(later / melt.plateau_modulus, 1.0) ** (1.0 / exponent)
    weight = above - np.append(above[1:], 0.0)
    mass = (melt.plateau_modulus * tau / melt.law_coefficient) ** (1.0 / melt.law_exponent)
    unseen = max(1.0 - float(above[0]), 0.0)
    small = UNSEEN * (melt.plateau_modulus * shortest / melt.law_coefficient) ** (
        1.0 / melt.law_exponent
    )
    first = float(weight @ mass) + unseen * small
    second = float(weight @ mass**2) + unseen * small**2
    if not first > 0:
        return {"Mw_g_per_mol": None, "Mz_g_per_mol": None}
    return {"Mw_g_per_mol": first, "Mz_g_per_mol": second / first}


# -- moments ---------------------------------------------------------------------------------------
def kernel_moment(kernel: str, s: float, exponent: float, n: float = 0.23) -> float | None:
    """int_0^inf z^(s-1) F(z)^(1/beta) dz of a scale-free kernel; None for one that is not.

    Gamma(s) beta^s for the exponential kernel (a check of the quadrature).
    """
    if kernel == "fluctuation":
        return None
    return _kernel_moment(kernel, float(s), float(exponent), float(n))


@lru_cache(maxsize=256)
def _kernel_moment(kernel: str, s: float, exponent: float, n: float) -> float:
    # trapezoid in ln z: both ends vanish as z^s and exponentially
    x = np.linspace(np.log(1e-14) / s, np.log(700.0 * exponent), 6000)
    z = np.exp(x)
    if kernel == "exponential":
        f = np.exp(-z / exponent)
    elif kernel == "reptation":
        f = tube_survival(z)
    else:
        f = power_law_decay(z, n) ** (1.0 / exponent)
    return float(np.sum(f * np.exp(s * x)) * (x[1] - x[0]))


@lru_cache(maxsize=64)
def kernel_area(kernel: str, exponent: float, n: float = 0.23) -> float | None:
    """c = int_0^inf F dz, by the same quadrature; None for a kernel that is not scale-free."""
    if kernel == "fluctuation":
        return None
    x = np.linspace(np.log(1e-14), np.log(700.0), 6000)
    z = np.exp(x)
    if kernel == "exponential":
        f = np.exp(-z)
    elif kernel == "reptation":
        f = tube_survival(z) ** exponent
    else:
        f = power_law_decay(z, n)
    return float(np.sum(f * z) * (x[1] - x[0]))


def moment_averages(
    spectrum: Spectrum, melt: Melt, model: Model, shortest: float = 0.0, longest: float = np.inf
) -> dict[str, float | None]:
    """Mw and Mz [g/mol] by Mellin moments of S(t) = (G/G_N)^(1/beta).

    Parameters
    ----------
    spectrum : Spectrum
    melt : Melt
    model : Model
    shortest : float
        1/omega_max [s], as in `relation_averages`.
    longest : float
        Longest time the data speak of, 1/omega_min [s]; a moment that takes more than
        `LONGEST_SHARE` of its value from beyond is None.
    """
    none: dict[str, float | None] = {"Mw_g_per_mol": None, "Mz_g_per_mol": None}
    beta, a, n = model.exponent, melt.law_exponent, melt.power_law_n
    area = kernel_area(model.kernel, beta, n)
    if area is None:
        return none
    unit = melt.law_coefficient / (melt.plateau_modulus * area)  # tau = unit M^a
    x = np.linspace(np.log(spectrum.tau[0]) - 30.0, np.log(700.0 * beta * spectrum.tau[-1]), 2000)
    t = np.exp(x)
    # modulus above G_N belongs to Rouse modes: S of the network cannot pass 1
    share = np.minimum(spectrum.relaxation_modulus(t) / melt.plateau_modulus, 1.0)
    survival = share ** (1.0 / beta)
    small = UNSEEN * (shortest / unit) ** (1.0 / a)
    unseen = 1.0 - float(survival[0])
    found: list[float | None] = []
    for k in (1, 2):
        s = k / a
        integrand = survival * np.exp(s * x)
        # before the first time S is level: int_0^t0 t^(s-1) S dt = S t0^s/s
        total = float(np.sum(integrand) * (x[1] - x[0]) + integrand[0] / s)
        beyond = float(np.sum(integrand[t > longest]) * (x[1] - x[0]))
        reference = _kernel_moment(model.kernel, s, beta, n)
        value = total / (unit**s * reference) + unseen * small**k
        found.append(None if beyond > LONGEST_SHARE * total else value)
    first, second = found
    return {
        "Mw_g_per_mol": first,
        "Mz_g_per_mol": None if first is None or second is None else second / first,
    }
