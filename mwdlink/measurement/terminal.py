"""What a spectrum says of terminal flow and of the crossover, and how far the window reaches it."""

from __future__ import annotations

import numpy as np

from mwdlink.measurement.continuous import Continuous
from mwdlink.measurement.modes import ModeFit
from mwdlink.measurement.sweep import Sweep
from mwdlink.quantity import Uncertain
from mwdlink.relaxation.spectrum import Spectrum, crossover_of

# eta0 counts as reached when it is at most a tenth above |eta*| at the lowest frequency, and Je0
# when it is at most a quarter above G'/|G*|^2 there: beyond that it is extrapolation.
REACHED_ETA0 = 1.10
REACHED_JE0 = 1.25
# Share of the extrapolated part that the smooth continuation may miss, either way [measured on
# log-normal melts: 5 to 12 %].
MISSED = 0.1


def terminal_values(
    sweep: Sweep, c: Continuous, discrete: ModeFit
) -> tuple[dict[str, Uncertain], bool]:
    """eta0, Je0 and mean time with their status, from the continuous spectrum and its members.

    Where they are resolved, the interval of the members is longer by the distance to the value of
    the discrete modes, on their side: noise moves both ways of fitting alike, and what smoothing
    does to the spectrum the members cannot know. A tenth of what lies beyond the lowest frequency
    is the least addition, to either side.

    Parameters
    ----------
    sweep : Sweep
        For its lowest frequency.
    c : Continuous
    discrete : ModeFit

    Returns
    -------
    bands : dict of str to Uncertain
        `eta0_Pa_s`, `Je0_per_Pa`, `mean_time_s`; lower bounds where the window ends too early.
    reached : bool
        Whether the window reaches terminal flow as far as eta0 needs it.
    """
    eta0, second = float(c.integral(1.0)), float(c.integral(2.0))
    je0 = second / eta0**2
    # the fitted response at the lowest frequency, for curve and members alike
    at = Spectrum(c.tau, c.H * c.step).moduli(sweep.omega[:1])
    g_abs = float(np.hypot(at[0][0], at[1][0]))
    eta_low, je_low = g_abs / sweep.omega[0], float(at[0][0]) / g_abs**2
    reached = bool(eta0 / eta_low <= REACHED_ETA0)
    reached_je0 = bool(reached and je0 / je_low <= REACHED_JE0)
    # the same of every member; empty without members
    x = sweep.omega[0] * c.tau
    m_eta0 = np.asarray(c.integral(1.0, members=True))
    m_second = np.asarray(c.integral(2.0, members=True))
    m_up = c.members @ (c.step * x * x / (1 + x * x))
    m_abs = np.hypot(m_up, c.members @ (c.step * x / (1 + x * x)))
    single = Spectrum(discrete.tau, discrete.strength)

    def quantity(
        value: float,
        samples: np.ndarray,
        resolved: bool,
        bound: float,
        bounds: np.ndarray,
        lines: float,
    ) -> Uncertain:
        samples, bounds = samples[np.isfinite(samples)], bounds[np.isfinite(bounds)]
        if resolved:
            if samples.size == 0:
                return Uncertain(float(value), level=c.level)
            q = Uncertain.from_samples(samples, value, level=c.level)
            low, high = (value if end is None else end for end in (q.low, q.high))
            unseen = MISSED * abs(value - bound)
            low -= max(value - lines, unseen)
            high += max(lines - value, unseen)
            return Uncertain(q.value, low, high, c.level)
        if bounds.size == 0 or samples.size == 0:
            return Uncertain(float(bound), level=c.level, status="lower_bound")
        low = float(np.quantile(bounds, (1 - c.level) / 2))
        # the upper end is where the smooth continuation leads: no promise, a plain number all the
        # same, so that tables need no holes
        high = float(np.quantile(samples, (1 + c.level) / 2))
        return Uncertain(
            float(bound), min(low, float(bound)), max(high, value), c.level, "lower_bound"
        )

    # curves no melt has can make a member vanish: such members do not count
    with np.errstate(all="ignore"):
        m_je0, m_time = m_second / m_eta0**2, m_second / m_eta0
        m_eta_low, m_je_low = m_abs / sweep.omega[0], m_up / m_abs**2
    bands = {
        "eta0_Pa_s": quantity(
            float(eta0), m_eta0, reached, eta_low, m_eta_low, single.zero_shear_viscosity
        ),
        "Je0_per_Pa": quantity(
            float(je0), m_je0, reached_je0, je_low, m_je_low, single.recoverable_compliance
        ),
        "mean_time_s": quantity(
            float(second / eta0),
            m_time,
            reached_je0,
            eta_low * je_low,
            m_eta_low * m_je_low,
            single.mean_time,
        ),
    }
    return bands, bool(reached)


def crossover_values(sweep: Sweep, c: Continuous) -> dict[str, Uncertain]:
    """Crossover inside the window, with the interval of the members that have one there."""
    low, high = float(sweep.omega[0]), float(sweep.omega[-1])
    best = crossover_of(Spectrum(c.tau, c.H * c.step).moduli, low, high)
    if best is None:
        return {}
    grid = np.geomspace(low, high, 200)
    x = np.multiply.outer(grid, c.tau)
    up = c.members @ (c.step * x * x / (1 + x * x)).T
    out = c.members @ (c.step * x / (1 + x * x)).T
    found = []
    for a, b in zip(np.log(up / out), np.log(up), strict=True):
        k = np.flatnonzero((a[:-1] < 0) & (a[1:] >= 0))
        if k.size:
            i = int(k[0])
            share = a[i] / (a[i] - a[i + 1])
            w = np.log(grid[i]) + share * np.log(grid[i + 1] / grid[i])
            found.append((np.exp(w), np.exp(b[i] + share * (b[i + 1] - b[i]))))
    samples = np.array(found).reshape(-1, 2)
    return {
        "omega_rad_per_s": Uncertain.from_samples(samples[:, 0], best[0], level=c.level),
        "G_Pa": Uncertain.from_samples(samples[:, 1], best[1], level=c.level),
    }
