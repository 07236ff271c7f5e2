"""How often the intervals of a spectrum hold the truth.

Run as a script it prints the cover table of docs/spectrum.md:

    python tests/measurement/cover_of_spectrum.py --sweeps 100
"""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parent))

from reproducibility import exact_spectrum, melts  # noqa: E402

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import builtin
from mwdlink.measurement.spectrum_fit import fit_spectrum
from mwdlink.measurement.sweep import Sweep
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model

QUANTITIES = {
    "eta0_Pa_s": "zero_shear_viscosity",
    "Je0_per_Pa": "recoverable_compliance",
    "mean_time_s": "mean_time",
}


def cover(
    distribution: Distribution,
    *,
    decades: tuple[float, float] = (-3.0, 2.0),
    per_decade: int = 5,
    sweeps: int = 40,
    noise: float = 0.02,
    given: bool = True,
    members: int = 100,
    kernel: str = "power-law",
) -> dict[str, float]:
    """Share of noisy sweeps whose 90 % intervals hold the truth, for resolved quantities and band.

    The band is asked at every node inside the supported range where H is at least a twentieth of
    |G*| at omega = 1/tau. Truth of eta0, Je0 and the mean time: those of the exact response.
    """
    omega = np.logspace(*decades, int(round((decades[1] - decades[0]) * per_decade)) + 1)
    melt = Relaxation(distribution, builtin("hdpe").melt(190.0), Model(kernel))
    storage, loss = melt.moduli(omega)
    true = melt.spectrum()
    exact = exact_spectrum(melt, decades)
    held: dict[str, list[float]] = {key: [] for key in QUANTITIES}
    error, band, width = [], [], []
    for seed in range(sweeps):
        rng = np.random.default_rng([seed, 11])
        up = storage * np.exp(noise * rng.standard_normal(omega.size))
        out = loss * np.exp(noise * rng.standard_normal(omega.size))
        fit = fit_spectrum(
            Sweep(omega, up, out), members=members, seed=seed, noise=noise if given else None
        )
        for key, name in QUANTITIES.items():
            q, value = fit.bands[key], getattr(true, name)
            if q.status == "resolved":
                held[key].append(q.low <= value <= q.high)
                if key == "eta0_Pa_s":
                    error.append(np.log(q.value / value))
                    width.append(np.log(q.high / q.low) / 2)
        c = fit.continuous
        H = np.exp(np.interp(np.log(c.tau), np.log(exact.tau), np.log(exact.H)))
        size = np.exp(np.interp(-np.log(c.tau), np.log(omega), np.log(np.hypot(storage, loss))))
        seen = fit.supported_mask & (H > 0.05 * size)
        band.append(np.mean((c.low[seen] <= H[seen]) & (H[seen] <= c.high[seen])))
    share = {key: float(np.mean(v)) if v else np.nan for key, v in held.items()}
    return share | {
        "resolved": len(error),
        "eta0 error": float(np.sqrt(np.mean(np.square(error)))) if error else np.nan,
        "eta0 bias": float(np.mean(error)) if error else np.nan,
        "eta0 half width": float(np.mean(width)) if width else np.nan,
        "band": float(np.mean(band)),
    }


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--sweeps", type=int, default=100)
    sweeps = parser.parse_args().sweeps
    heads = ("melt", "noise", "resolved", "eta0", "Je0", "mean time", "band of H")
    heads += ("error of eta0", "half width of its interval")
    print("| " + " | ".join(heads) + " |\n|" + "---|" * len(heads))
    for name, distribution in melts().items():
        for noise, given in ((0.02, True), (0.02, False)):
            s = cover(distribution, sweeps=sweeps, noise=noise, given=given)
            cells = [f"{s[k]:.2f}" for k in (*QUANTITIES, "band")]
            cells += [f"{100 * s[k]:.2f} %" for k in ("eta0 error", "eta0 half width")]
            how = "given" if given else "estimated"
            row = [name, f"{100 * noise:.0f} %, {how}", str(s["resolved"]), *cells]
            print("| " + " | ".join(row) + " |", flush=True)


if __name__ == "__main__":
    main()
