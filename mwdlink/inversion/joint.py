"""GPC and sweep as one inference: one distribution, seen by two instruments with their own errors.

Unknown are u = ln(mass per node) over the ranges of both instruments, a lump of chains longer than
the sweep can follow, and what neither instrument is sure of: the factor of the time law, the mixing
exponent, the GPC's factor on M, the level of the moduli and the GPC's baseline. Each has a prior;
a wrong time law looks like a tail, and a wrong GPC calibration looks like a wrong time law, so none
of them may be taken as known.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np

from mwdlink.inversion.joint_data import GpcRows
from mwdlink.inversion.joint_response import Response
from mwdlink.inversion.roughness import roughness

# the unknowns beside the distribution, in this order
NUISANCE = ("time law", "exponent", "calibration", "modulus", "baseline")
TIME, EXPONENT, CALIBRATION, MODULUS, BASELINE = range(5)
PINNED = 1e-3
# ln of the weight beyond the sweep's reach: centre and spread of a weak prior
TOP_CENTRE, TOP_SPREAD = float(np.log(1e-4)), 3.0
# where the curve is the smooth continuation of the GPC's the lump is empty
EMPTY_CENTRE, EMPTY_SPREAD = -16.0, 1.0
# near the GPC's end lambda falls to a part of itself (from here, over so many decades of M)
TAIL_FROM, TAIL_RAMP, TAIL_FREEDOM = -0.6, 0.4, 3e-4
# lambda of a curve that may only go on smoothly there
STIFF = 3.0


@dataclass(frozen=True, eq=False)
class Priors:
    """What is believed of the unknowns beside the distribution, before the data.

    Attributes
    ----------
    centre, spread : ndarray of shape (5,)
        Of ln time-law factor, exponent, ln GPC factor on M, ln level of the moduli, GPC baseline
        (in parts of the peak).
    tail_free : bool
        True where the curve may turn as it likes near the end of the GPC's range; False where it
        has to be the smooth continuation of what is below.
    """

    centre: np.ndarray
    spread: np.ndarray
    tail_free: bool = True

    @property
    def lump(self) -> tuple[float, float]:
        """Centre and spread of ln of the weight beyond the sweep's reach."""
        return (TOP_CENTRE, TOP_SPREAD) if self.tail_free else (EMPTY_CENTRE, EMPTY_SPREAD)

    def with_(self, index: int, spread: float) -> Priors:
        """The same with another spread of one unknown."""
        new = self.spread.copy()
        new[index] = spread
        return replace(self, spread=new)


@dataclass(frozen=True, eq=False)
class Extra:
    """A slow process of its own beside the chains: strength and time, both unknown.

    Attributes
    ----------
    kind : str
        `slow` (a broad relaxation slower than the chains) or `plateau` (an elastic network).
    centre, spread : ndarray of shape (k,)
        Of ln strength [Pa] and, for `slow`, ln time [s].
    """

    kind: str
    centre: np.ndarray
    spread: np.ndarray


@dataclass(frozen=True, eq=False)
class JointProblem:
    """Data of both instruments, forward maps and priors.

    Attributes
    ----------
    x : ndarray of shape (n,)
        log10 M of the nodes, uniform.
    gpc : GpcRows
    response : Response
    data, sigma : ndarray of shape (2 n_w,)
        ln of G' over G'', and their relative errors.
    priors : Priors
    extra : Extra or None
    """

    x: np.ndarray
    gpc: GpcRows
    response: Response
    data: np.ndarray
    sigma: np.ndarray
    priors: Priors
    extra: Extra | None = None
    _cache: dict = field(default_factory=dict)

    @property
    def n(self) -> int:
        """Number of nodes."""
        return int(self.x.size)

    @property
    def spacing(self) -> float:
        """Decades between nodes."""
        return float(self.x[1] - self.x[0])

    @property
    def size(self) -> int:
        """Number of unknowns: nodes, lump above, nuisance, extra process."""
        return self.n + 1 + len(NUISANCE) + (0 if self.extra is None else self.extra.centre.size)

    def with_priors(self, priors: Priors, extra: Extra | None = None) -> JointProblem:
        """The same data under other priors."""
        return replace(self, priors=priors, extra=extra, _cache={})

    # -- prior ----------------------------------------------------------------------------------
    def prior_rows(self, smoothing: float) -> tuple[np.ndarray, np.ndarray]:
        """Rows and targets of the Gaussian prior, shapes (n_p, size) and (n_p,)."""
        key = float(smoothing)
        if key not in self._cache:
            self._cache[key] = self._prior_rows(key)
        return self._cache[key]

    def _prior_rows(self, smoothing: float) -> tuple[np.ndarray, np.ndarray]:
        n, size = self.n, self.size
        base = roughness(n, self.spacing)
        third = np.sqrt(smoothing) * base.third[:, :n]
        middle = self.x[1:-2] + 0.5 * self.spacing - self.gpc.position[-1]
        if self.priors.tail_free:
            # a tail is a part of its own: where the GPC ends, the curve may turn as it likes
            ramp = np.clip((middle - TAIL_FROM) / TAIL_RAMP, 0.0, 1.0)
            third *= np.sqrt(TAIL_FREEDOM**ramp)[:, None]
        else:
            third[middle > TAIL_FROM] *= np.sqrt(max(STIFF / smoothing, 1.0))
        rows = np.zeros((third.shape[0] + 3 + size - n - 1, size))
        target = np.zeros(rows.shape[0])
        rows[: n - 3, :n] = third
        rows[n - 3 : n, :n] = base.weak[:, :n]
        target[n - 3 : n] = base.weak_centre
        centre, spread = self.priors.centre, self.priors.spread
        if self.extra is not None:
            centre = np.concatenate([centre, self.extra.centre])
            spread = np.concatenate([spread, self.extra.spread])
        at = np.arange(n, rows.shape[0])
        rows[at, np.arange(n + 1, size)] = 1.0 / spread
        target[at] = centre / spread
        return rows, target

    # -- data -----------------------------------------------------------------------------------
    def residuals(self, z: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Residuals of sweep, GPC and lump and their derivatives.

        Returns
        -------
        r : ndarray of shape (n_r,)
        slope : ndarray of shape (n_r, size)
        w : ndarray of shape (n + 1,)
            Weights of nodes and lump.
        """
        n = self.n
        w = weights(z[: n + 1])
        p = z[n + 1 : n + 1 + len(NUISANCE)]
        log_y, dw, d_time, d_exponent = self.response.log_moduli(w, p[TIME], p[EXPONENT])
        log_y = log_y + p[MODULUS]
        slope = np.zeros((self.data.size + self.gpc.size + 1, self.size))
        top = slice(0, self.data.size)
        # d/du through the softmax: J diag(w) - (J w) w'
        slope[top, : n + 1] = (dw - (dw @ w)[:, None]) * w
        slope[top, n + 1 + TIME] = d_time
        slope[top, n + 1 + EXPONENT] = d_exponent
        slope[top, n + 1 + MODULUS] = 1.0
        if self.extra is not None:
            q = z[n + 1 + len(NUISANCE) :]
            add, d_add = self.response.extra_process(self.extra.kind, q)
            y = np.exp(log_y)
            share = y / (y + add)
            slope[top] *= share[:, None]
            slope[top, n + 1 + len(NUISANCE) :] = d_add / (y + add)[:, None]
            log_y = np.log(y + add)
        slope[top] /= self.sigma[:, None]
        g, dg_u, dg_c, dg_b = self.gpc.model(self.x, z[:n], p[CALIBRATION], p[BASELINE])
        middle = slice(self.data.size, self.data.size + self.gpc.size)
        slope[middle, :n] = dg_u / self.gpc.sigma[:, None]
        slope[middle, n + 1 + CALIBRATION] = dg_c / self.gpc.sigma
        slope[middle, n + 1 + BASELINE] = dg_b / self.gpc.sigma
        centre, spread = self.priors.lump
        slope[-1, : n + 1] = -w / spread
        slope[-1, n] += 1.0 / spread
        r = np.concatenate(
            [
                (log_y - self.data) / self.sigma,
                (g - self.gpc.density) / self.gpc.sigma,
                [(np.log(max(w[n], 1e-300)) - centre) / spread],
            ]
        )
        return r, slope, w


def weights(u: np.ndarray) -> np.ndarray:
    """softmax(u): positive, unit sum."""
    e = np.exp(u - u.max())
    return e / e.sum()
