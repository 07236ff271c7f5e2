"""The branching index and the linear polyethylene laws against published numbers."""

from __future__ import annotations

import numpy as np
import pytest

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import builtin
from mwdlink.decisions.branching_signs import branching_index
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model


@pytest.mark.parametrize(("iv", "eta0"), [(1.0, 639.5), (1.5, 6160.0), (2.0, 30730.0)])
def test_linear_line(iv: float, eta0: float) -> None:
    """LCBI = 0 on the linear line (Shroff & Mavridis, Macromolecules 32 (1999) 8454, published)."""
    assert branching_index(eta0, iv) == pytest.approx(0.0, abs=2e-4)
    assert branching_index(3.0 * eta0, iv) > 0.15


@pytest.mark.parametrize("dispersity", [2.5, 4.0])
def test_card_lies_near_the_linear_line(dispersity: float) -> None:
    """Log-normal melts of the linear card (Raju 1979) with its Mark-Houwink constants (recalled):
    within 0.2 of the published line of commercial linear resins."""
    card = builtin("hdpe")
    k, a = card.get("mark_houwink.K_dL_per_g"), card.get("mark_houwink.a")
    for Mw in (8e4, 1.5e5, 3e5):
        d = Distribution.from_averages(Mw=Mw, dispersity=dispersity)
        eta0 = Relaxation(d, card.melt(190.0)).zero_shear_viscosity
        assert abs(branching_index(eta0, k * d.moment(a))) < 0.2


def test_two_published_laws_of_linear_polyethylene() -> None:
    """Raju 1979 shifted to 150 C against Stadler et al. 2006 (13 broad samples): 1.37 (published
    laws; the factor derived)."""
    ours = builtin("hdpe").melt(150.0).zero_shear_law(2e5)
    theirs = 8.96e-15 * 2e5**3.60
    assert theirs / float(ours) == pytest.approx(1.37, rel=0.03)


def test_zero_shear_viscosity_depends_on_family() -> None:
    """Known tension, reported and not asserted away: at one Mw and dispersity 4 the log-normal
    has twice the viscosity of the Schulz-Zimm (derived, exponential kernel, no Rouse part)."""
    melt = builtin("hdpe").melt(190.0)
    model = Model("exponential", 2.0, rouse=False)
    eta = {}
    for family in ("log-normal", "schulz-zimm"):
        d = Distribution.from_averages(Mw=1.5e5, dispersity=4.0, family=family)
        eta[family] = Relaxation(d, melt, model).zero_shear_viscosity
    law = float(melt.zero_shear_law(1.5e5))
    assert eta["log-normal"] / law == pytest.approx(2.75, rel=0.05)
    assert eta["schulz-zimm"] / law == pytest.approx(1.38, rel=0.05)
    assert np.log10(eta["log-normal"] / eta["schulz-zimm"]) > 2 * 0.13
