"""Do the two moduli of a sweep belong together, and which points do not fit in.

The Kramers-Kronig relations tie G' to G''. A sum of positive Maxwell modes obeys them by
construction and can come as near as one likes to any relaxation spectrum, so what the best positive
modes leave over beyond the scatter of the curves themselves is inconsistent. Nothing is ever
changed or left out here: points and slips are named and proposed.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from scipy.stats import chi2 as chi2_law
from scipy.stats import f as f_law

from mwdlink.errors import Caution
from mwdlink.measurement.mishaps import Proposal, propose
from mwdlink.measurement.modes import ModeFit, fit_on_grid
from mwdlink.measurement.noise import (
    FLOOR,
    NoiseEstimate,
    Weights,
    chi2_in_words,
    estimate_noise,
    noise_of,
)
from mwdlink.measurement.sweep import Sweep
from mwdlink.result import Result

# Without any independent measure of the noise only a gross misfit can be called one.
BLIND = 0.05


@dataclass(frozen=True)
class KramersKronig:
    """The verdict on the two moduli together.

    Attributes
    ----------
    chi2_per_point : float
        chi2 of the best positive modes over the degrees of freedom, in units of `noise` [-].
    passed : bool
        Whether chance explains it.
    limit : float
        The chi2 per point that chance exceeds once in a thousand sweeps [-].
    noise : float
        Typical relative error it is measured against [-].
    noise_source : str
        "columns", "given", "roughness" (each curve's own scatter) or "blind" (none to be had).
    degrees_of_freedom : int
    fit : ModeFit
    """

    chi2_per_point: float
    passed: bool
    limit: float
    noise: float
    noise_source: str
    degrees_of_freedom: int
    fit: ModeFit

    def to_dict(self) -> dict[str, Any]:
        return {
            "chi2_per_point": self.chi2_per_point,
            "passed": self.passed,
            "limit": self.limit,
            "noise": self.noise,
            "noise_source": self.noise_source,
        }

    def text(self) -> str:
        """The verdict in one or two sentences."""
        against = {
            "columns": "the errors in the file's own columns",
            "given": "the given noise",
            "roughness": "the scatter of each curve by itself",
            "blind": "5 %, because the points are too sparse to show their own scatter",
        }[self.noise_source]
        size = 100 * self.noise
        if self.passed:
            return (
                f"G' and G'' belong together: one positive relaxation spectrum fits both to within "
                f"{against} ({size:.1f} %; chi2 per point {self.chi2_per_point:.2g})."
            )
        return (
            f"G' and G'' do not belong together: no positive relaxation spectrum fits both to "
            f"within {against} ({size:.1f} %; chi2 per point {self.chi2_per_point:.2g}, chance "
            f"reaches {self.limit:.2g})."
        )


def kramers_kronig(sweep: Sweep, noise: float | None = None) -> KramersKronig:
    """Kramers-Kronig by positive modes fitted to both moduli at once.

    Parameters
    ----------
    sweep : Sweep
    noise : float, optional
        Relative noise [-]. Without it and without error columns the scatter of each curve by
        itself is the measure, never the residuals of this very fit, which would always pass.

    Returns
    -------
    KramersKronig

    Raises
    ------
    InputError
        With fewer than four points.
    NotConverged

    References
    ----------
    .. [1] Poudel & Shanbhag, Korea-Aust. Rheol. J. 34 (2022) 369 (published).
    """
    estimate = None
    if noise is None and sweep.sigma_storage is None and sweep.sigma_loss is None:
        estimate = estimate_noise(sweep)
        source = "blind" if estimate.roughness is None else "roughness"
        size = BLIND if estimate.roughness is None else max(estimate.roughness, FLOOR)
        ones = np.ones(len(sweep))
        weights = Weights(size * ones, size * ones, "given")
    else:
        weights = noise_of(sweep, noise)
        source = weights.source
    fit = fit_on_grid(
        sweep.omega, sweep.storage, sweep.loss, weights.sigma_storage, weights.sigma_loss
    )
    freedom = max(fit.points - fit.free, 1)
    if source == "roughness":
        # the yardstick is itself estimated, with about 0.8 n degrees of freedom [measured]
        limit = float(f_law.ppf(0.999, freedom, 0.8 * len(sweep)))
    else:
        limit = float(chi2_law.ppf(0.999, freedom) / freedom)
    value = fit.chi2_per_point
    return KramersKronig(value, value <= limit, limit, weights.typical, source, freedom, fit)


@dataclass(frozen=True)
class Outlier:
    """One reading that does not fit in.

    Attributes
    ----------
    index : int
        Position in the sweep, from 0.
    row : int or None
        Line in the source file.
    omega : float
        [rad/s]
    modulus : str
        "G'" or "G''".
    deviation : float
        data/fit - 1 [-].
    score : float
        The same in robust standard deviations [-].
    """

    index: int
    row: int | None
    omega: float
    modulus: str
    deviation: float
    score: float

    def text(self) -> str:
        """Where and how far, in words."""
        place = f"row {self.row}" if self.row is not None else f"point {self.index + 1}"
        return (
            f"{place} ({self.omega:.4g} rad/s): {self.modulus} is {100 * self.deviation:+.0f} % "
            f"off, {abs(self.score):.0f} times the scatter of the others"
        )


@dataclass(frozen=True)
class Consistency(Result):
    """Everything found on one sweep, proposed and never changed.

    Attributes
    ----------
    sweep : Sweep
    kramers_kronig : KramersKronig
    noise : NoiseEstimate
    outliers : tuple of Outlier
    proposals : tuple of Proposal
        Slips recognised: swapped columns, Hz for rad/s, kPa for Pa, overload, torque floor.
    passes_without_outliers : bool or None
        Whether the sweep passes once the outliers are left out; None where there are none.
    warnings : tuple of Caution
    """

    command: ClassVar[str] = "consistency"
    main_table: ClassVar[str] = "residuals.csv"

    sweep: Sweep
    kramers_kronig: KramersKronig
    noise: NoiseEstimate
    outliers: tuple[Outlier, ...]
    proposals: tuple[Proposal, ...]
    passes_without_outliers: bool | None = None
    warnings: tuple[Caution, ...] = ()

    @property
    def passed(self) -> bool:
        """Kramers-Kronig holds and nothing is proposed."""
        return self.kramers_kronig.passed and not self.outliers and not self.proposals

    def payload(self) -> dict[str, Any]:
        return {
            "consistency": {
                "kramers_kronig": self.kramers_kronig.to_dict(),
                "passes_without_outliers": self.passes_without_outliers,
            },
            "noise": self.noise.relative,
            "outliers": [
                {
                    "row": o.row,
                    "omega_rad_per_s": o.omega,
                    "modulus": o.modulus,
                    "deviation": o.deviation,
                    "score": o.score,
                }
                for o in self.outliers
            ],
            "proposals": [p.to_dict() for p in self.proposals],
        }

    def tables(self) -> dict[str, Any]:
        return {"residuals.csv": residual_table(self.sweep, self.kramers_kronig.fit)}

    def answer(self) -> str:
        text = self.kramers_kronig.text()
        if self.outliers:
            text += " " + _sentence("Readings that stand out: ", [o.text() for o in self.outliers])
        for proposal in self.proposals:
            text += " " + proposal.text
        return text

    def paragraph(self) -> str:
        return self.answer() + " " + self.noise.text()

    def cannot_say(self) -> tuple[str, ...]:
        out = [
            "A factor common to both moduli (gap, strain or torque calibration) and a factor on "
            "the frequency leave the two moduli consistent: this test cannot see them."
        ]
        if self.kramers_kronig.noise_source == "blind":
            out.append(
                "With so few points a decade the scatter of the curves cannot be told from their "
                "shape: only misfits of more than 5 % are noticed."
            )
        return tuple(out)


def residual_table(sweep: Sweep, fit: ModeFit) -> Any:
    """Point by point: data, fit and relative residuals, as a DataFrame."""
    import pandas as pd

    table = {
        "omega [rad/s]": sweep.omega,
        "G' [Pa]": sweep.storage,
        "G'' [Pa]": sweep.loss,
        "G' fit [Pa]": fit.storage,
        "G'' fit [Pa]": fit.loss,
        "residual' [-]": sweep.storage / fit.storage - 1.0,
        "residual'' [-]": sweep.loss / fit.loss - 1.0,
    }
    if sweep.rows is not None:
        table["row"] = sweep.rows
    return pd.DataFrame(table)


def find_outliers(sweep: Sweep, estimate: NoiseEstimate) -> tuple[Outlier, ...]:
    """Readings left out of the noise estimate, with their distance from the fit of the others."""
    fit = estimate.modes
    found = []
    spread = max(estimate.raw, 1e-3)
    for i in estimate.outliers:
        for name, data, model in (
            ("G'", sweep.storage[i], fit.storage[i]),
            ("G''", sweep.loss[i], fit.loss[i]),
        ):
            deviation = float(data / model - 1.0)
            if abs(deviation) > 4.0 * spread:
                row = None if sweep.rows is None else int(sweep.rows[i])
                omega = float(sweep.omega[i])
                found.append(Outlier(i, row, omega, name, deviation, deviation / spread))
    return tuple(found)


def check_consistency(
    sweep: Sweep,
    *,
    noise: float | None = None,
    complex_viscosity: Any = None,
    other: Sweep | None = None,
    plateau_modulus: float | None = None,
) -> Consistency:
    """Test a sweep before anything is concluded from it.

    Parameters
    ----------
    sweep : Sweep
        At least four frequencies.
    noise : float, optional
        Relative noise [-]; default the error columns, else each curve's own scatter.
    complex_viscosity : array_like of shape (n,), optional
        |eta*| as the instrument wrote it [Pa s]: shows Hz taken for rad/s, and kPa for Pa. Default
        the sweep's own `stated_viscosity`, which the readers keep where the file has the column.
    other : Sweep, optional
        A sweep of the same melt at the same temperature that is trusted: shows the same slips.
    plateau_modulus : float, optional
        G_N of the polymer [Pa] (`polymer.melt(T).plateau_modulus`): shows kPa taken for Pa.

    Returns
    -------
    Consistency
        Never a changed sweep: what stands out is named by row, what looks like a slip is proposed.

    Raises
    ------
    InputError
        With fewer than four points.
    NotConverged
    """
    verdict = kramers_kronig(sweep, noise)
    estimate = estimate_noise(sweep)
    outliers = find_outliers(sweep, estimate)
    if complex_viscosity is None:
        complex_viscosity = sweep.stated_viscosity
    proposals = propose(
        sweep,
        verdict.chi2_per_point / max(verdict.limit, 1e-12),
        verdict.noise,
        taken=tuple(o.index for o in outliers),
        complex_viscosity=complex_viscosity,
        other=other,
        plateau_modulus=plateau_modulus,
    )
    without = None
    if outliers:
        keep = np.ones(len(sweep), dtype=bool)
        keep[[o.index for o in outliers]] = False
        if keep.sum() >= 4:
            without = kramers_kronig(sweep.select(keep), noise).passed
    warnings = list(sweep.warnings)
    if not verdict.passed:
        warnings.append(Caution("kramers_kronig_failed", verdict.text()))
    elif verdict.noise_source in ("columns", "given"):
        words = chi2_in_words(
            verdict.chi2_per_point, verdict.degrees_of_freedom, verdict.noise_source
        )
        warnings += [Caution("misfit_unlike_noise", words)] if words else []
    if outliers:
        text = _sentence("Readings that stand out: ", [o.text() for o in outliers])
        warnings.append(Caution("outliers", text + " They were kept; leave them out by their row."))
    warnings += [Caution(p.code, p.text) for p in proposals]
    return Consistency(sweep, verdict, estimate, outliers, proposals, without, tuple(warnings))


def _sentence(head: str, parts: list[str]) -> str:
    more = f"; and {len(parts) - 6} more" if len(parts) > 6 else ""
    return head + "; ".join(parts[:6]) + more + "."
