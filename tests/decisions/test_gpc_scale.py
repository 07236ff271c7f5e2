"""Molar masses equivalent to the standards', wherever a distribution is turned into times."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from decisions.made_up import HDPE, A, B

from mwdlink.chains.distribution import CONVERTED, Distribution
from mwdlink.chains.gpc_error import GpcError
from mwdlink.chains.polymer import Polymer, builtin
from mwdlink.decisions.blend import blend
from mwdlink.decisions.gpc_scale import STANDARD_A, STANDARD_K, as_own
from mwdlink.decisions.predict import predict
from mwdlink.decisions.rest import rest_time


def as_shown(d: Distribution) -> Distribution:
    """The same chains as a GPC calibrated with polystyrene shows them: K M^(1+a) is common."""
    k, a = HDPE.get("mark_houwink.K_dL_per_g"), HDPE.get("mark_houwink.a")

    def moved(m: Any) -> Any:
        return (k / STANDARD_K * m ** (1 + a)) ** (1 / (1 + STANDARD_A))

    return replace(
        d, molar_mass=moved(d.molar_mass), edges=moved(d.edges), calibration="equivalent"
    )


def eta0(d: Distribution, card: Polymer = HDPE) -> float:
    return predict(d, card, members=0).outputs.values["eta0_Pa_s"]


def codes(result: Any) -> set[str]:
    return {c.code for c in result.warnings}


def test_predict_reads_equivalent_masses() -> None:
    """Derived: what polystyrene standards would show of known chains relaxes as the chains do."""
    shown = as_shown(A)
    assert 1.5 < shown.Mw / A.Mw < 3.0
    result = predict(shown, HDPE, members=0)
    assert result.outputs.values["eta0_Pa_s"] == pytest.approx(eta0(A), rel=1e-9)
    assert "gpc_scale_converted" in codes(result)
    assert "calibration_equivalent" not in codes(result)
    # as they are they would be far off
    assert eta0(replace(shown, calibration="absolute")) > 5 * eta0(A)


def test_never_twice() -> None:
    """Derived: what a result hands on is converted already, and keeps its error of 5 %."""
    own = predict(as_shown(A), HDPE, members=0).distribution
    assert own.calibration == CONVERTED and as_own(own, HDPE) is own
    assert eta0(own) == pytest.approx(eta0(A), rel=1e-9)
    assert GpcError().spread_of(own) == 0.05
    assert "5 % (converted)" in GpcError().words((CONVERTED,))


def test_rest_and_blend_read_them_too() -> None:
    """Derived: the same waiting times and the same blend as from the chains' own masses."""
    waits = [rest_time(d, HDPE, residuals=(0.1,), members=0).waits for d in (A, as_shown(A))]
    for own, shown in zip(*waits, strict=True):
        assert shown.time.value == pytest.approx(own.time.value, rel=1e-9)
    one, other = (blend([x, B], (0.3, 0.7), HDPE, members=0) for x in (A, as_shown(A)))
    assert other.outputs.values["eta0_Pa_s"] == pytest.approx(one.outputs.values["eta0_Pa_s"])
    assert "gpc_scale_converted" in codes(other)


def test_a_card_that_cannot_says_so() -> None:
    """Without Mark-Houwink constants the masses stay as they are, with a caution."""
    card = builtin("polyisobutylene")
    assert card.get("mark_houwink.K_dL_per_g") is None
    d = Distribution.from_nodes(np.array([1e5, 3e5]), [0.5, 0.5], calibration="equivalent")
    result = predict(d, card, members=0)
    assert result.distribution.molar_mass == pytest.approx(d.molar_mass)
    assert "gpc_scale_equivalent" in codes(result)
    said = next(w.text for w in result.warnings if w.code == "gpc_scale_equivalent")
    assert "not the factor" in said
