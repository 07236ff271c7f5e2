"""How well a continuous spectrum repeats from one noisy sweep to the next.

Run as a script it prints the table of docs/spectrum.md:

    python tests/measurement/reproducibility.py --sweeps 100
"""

from __future__ import annotations

import argparse

import numpy as np

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import builtin
from mwdlink.measurement.continuous import Continuous
from mwdlink.measurement.spectrum_fit import fit_spectrum
from mwdlink.measurement.sweep import Sweep
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model

NOISE = 0.03


def melts() -> dict[str, Distribution]:
    """Invented linear polyethylenes: broad ones of several shapes, narrow ones, two peaks."""
    make = Distribution.from_averages
    return {
        "log-normal, dispersity 2": make(Mw=1.2e5, dispersity=2.0),
        "log-normal, dispersity 5": make(Mw=1.0e5, dispersity=5.0),
        "Schulz-Zimm, dispersity 2": make(Mw=1.2e5, dispersity=2.0, family="schulz-zimm"),
        "two parts, 3e4 and 2e5": Distribution.blend(
            [(make(Mw=3e4, dispersity=1.8), 0.5), (make(Mw=2e5, dispersity=1.8), 0.5)]
        ),
        "narrow, dispersity 1.1": make(Mw=1.5e5, dispersity=1.1),
        "two narrow, 5e4 and 2e5": Distribution.blend(
            [(make(Mw=5e4, dispersity=1.1), 0.5), (make(Mw=2e5, dispersity=1.1), 0.5)]
        ),
    }


def exact_spectrum(response: Relaxation, decades: tuple[float, float]) -> Continuous:
    """Spectrum of the exact curve, taken without noise over two decades more on either side."""
    wide = np.logspace(decades[0] - 2, decades[1] + 2, int(15 * (decades[1] - decades[0] + 4)) + 1)
    return fit_spectrum(Sweep(wide, *response.moduli(wide)), members=0, noise=2e-4).continuous


def spread(
    distribution: Distribution,
    *,
    decades: tuple[float, float] = (-3.0, 3.0),
    per_decade: int = 5,
    sweeps: int = 20,
    noise: float = NOISE,
    kernel: str = "power-law",
) -> dict[str, float]:
    """Standard deviation of ln H over noise seeds inside the supported range.

    Counted where H is at least a twentieth of |G*| at omega = 1/tau, that is where it matters for
    what was measured: in the terminal region H falls faster than any curve can follow. `of modulus`
    is the largest standard deviation of H in units of that |G*|, everywhere in the supported range.
    `bias` is the root mean square distance of the mean from the spectrum of the exact curve, taken
    without noise over two decades more on either side.
    """
    omega = np.logspace(*decades, int(round((decades[1] - decades[0]) * per_decade)) + 1)
    response = Relaxation(distribution, builtin("hdpe").melt(190.0), Model(kernel))
    storage, loss = response.moduli(omega)
    truth = exact_spectrum(response, decades)
    curves = []
    for seed in range(sweeps):
        rng = np.random.default_rng([seed, 7])
        up = storage * np.exp(noise * rng.standard_normal(omega.size))
        out = loss * np.exp(noise * rng.standard_normal(omega.size))
        fit = fit_spectrum(Sweep(omega, up, out), members=0, noise=noise)
        curves.append(fit.continuous.H)
    logs = np.log(np.array(curves))
    tau = fit.continuous.tau
    size = np.exp(np.interp(-np.log(tau), np.log(omega), np.log(np.hypot(storage, loss))))
    counted = fit.supported_mask & (np.exp(logs.mean(axis=0)) > 0.05 * size)
    deviation = logs.std(axis=0, ddof=1)[counted]
    bias = (logs.mean(axis=0) - np.interp(np.log(tau), np.log(truth.tau), np.log(truth.H)))[counted]
    everywhere = (np.exp(logs).std(axis=0, ddof=1) / size)[fit.supported_mask]
    return {
        "of modulus": float(everywhere.max()),
        "median": float(np.median(deviation)),
        "largest": float(deviation.max()),
        "rms": float(np.sqrt(np.mean(deviation**2))),
        "bias": float(np.sqrt(np.mean(bias**2))),
        "nodes": int(counted.sum()),
    }


def others() -> dict[str, Distribution]:
    """Melts that had no part in the choice of what is known of the smoothing beforehand; they had
    one in that of the limit on the scatter."""
    make = Distribution.from_averages
    return {
        "log-normal, dispersity 1.08": make(Mw=2e5, dispersity=1.08),
        "log-normal, dispersity 1.2": make(Mw=1.0e5, dispersity=1.2),
        "log-normal, dispersity 3": make(Mw=0.8e5, dispersity=3.0),
        "Schulz-Zimm, dispersity 1.4": make(Mw=1.5e5, dispersity=1.4, family="schulz-zimm"),
        "two parts, 4e4 and 3e5": Distribution.blend(
            [(make(Mw=4e4, dispersity=1.2), 0.6), (make(Mw=3e5, dispersity=1.2), 0.4)]
        ),
    }


def fresh() -> dict[str, Distribution]:
    """Melts that had no part in any choice: the limit on the scatter was set with the others."""
    make = Distribution.from_averages
    return {
        "log-normal, dispersity 1.15": make(Mw=2.2e5, dispersity=1.15),
        "Schulz-Zimm, dispersity 1.2": make(Mw=1.8e5, dispersity=1.2, family="schulz-zimm"),
        "two parts, 6e4 and 2.5e5": Distribution.blend(
            [(make(Mw=6e4, dispersity=1.15), 0.4), (make(Mw=2.5e5, dispersity=1.15), 0.6)]
        ),
        "body with 3 % at 8 times": Distribution.blend(
            [(make(Mw=1.0e5, dispersity=2.5), 0.97), (make(Mw=8e5, dispersity=1.2), 0.03)]
        ),
    }


# The exponential kernel ends a spectrum more sharply than the default one.
SHARPER = ("Schulz-Zimm, dispersity 2", "narrow, dispersity 1.1", "two narrow, 5e4 and 2e5")
KEYS = ("median", "rms", "largest", "bias", "of modulus")
WINDOWS = (((-3, 3), 5), ((-2, 2), 5), ((-2, 2), 10))


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--sweeps", type=int, default=60)
    parser.add_argument("--others", action="store_true", help="other melts, another kernel")
    parser.add_argument("--fresh", action="store_true", help="melts not tuned on, three kernels")
    asked = parser.parse_args()
    sweeps = asked.sweeps
    heads = ("melt", "kernel", "window [rad/s]", "points per decade", "nodes", "median")
    heads += ("root mean square", "largest", "distance", "largest, of G*")
    print("| " + " | ".join(heads) + " |\n|" + "---|" * len(heads))
    rows = [(name, "power-law") for name in melts()] + [(name, "exponential") for name in SHARPER]
    known = melts()
    if asked.others:
        known, rows = others(), [(name, "reptation") for name in others()]
    if asked.fresh:
        known = fresh()
        rows = [
            (name, kernel) for kernel in ("power-law", "exponential", "reptation") for name in known
        ]
    for name, kernel in rows:
        for window, density in WINDOWS:
            s = spread(
                known[name], decades=window, per_decade=density, sweeps=sweeps, kernel=kernel
            )
            span = f"1e{window[0]} to 1e{window[1]}"
            cells = [f"{100 * s[k]:.1f} %" for k in KEYS]
            cells = [name, kernel, span, str(density), str(s["nodes"]), *cells]
            print("| " + " | ".join(cells) + " |", flush=True)


if __name__ == "__main__":
    main()
