"""Predictions with bands, held against closed forms and the single-melt code they speed up."""

from __future__ import annotations

import json
import time

import numpy as np
import pytest
from decisions.made_up import HDPE, A, B

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.families import lognormal
from mwdlink.chains.polymer import Polymer
from mwdlink.decisions.ensemble import draw, exponent_belief
from mwdlink.decisions.predict import predict
from mwdlink.decisions.properties import Curves, melt_flow_rates, properties_of
from mwdlink.decisions.response import Bank, inner_frequencies
from mwdlink.errors import InputError, ModelError
from mwdlink.relaxation.flow import melt_flow_rate
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model, relaxation_times


@pytest.fixture(scope="module")
def prediction():
    return predict(B, HDPE, temperature_C=190.0)


def test_keys_are_those_of_the_contract(prediction):
    """Compared with the project's own contract of result keys."""
    d = prediction.to_dict()
    assert set(d["averages"]) == {"Mn_g_per_mol", "Mw_g_per_mol", "Mz_g_per_mol", "dispersity"}
    assert set(d["terminal"]) == {"eta0_Pa_s", "Je0_per_Pa", "mean_time_s"}
    assert set(d["crossover"]) == {"omega_rad_per_s", "G_Pa"}
    assert [f["load_kg"] for f in d["melt_flow"]] == [2.16, 5.0, 21.6]
    assert set(d["indices"]) == {
        "eta_0.1", "eta_1", "eta_10", "eta_100", "thinning_0.1_100", "tan_delta_0.1",
    }  # fmt: skip
    for key in ("averages", "terminal", "crossover", "indices"):
        assert set(d["bands"][key]) == set(d[key])
        for name, value in d[key].items():
            band = d["bands"][key][name]
            assert band["low"] <= value <= band["high"]
            assert band["value"] == pytest.approx(value)
    json.dumps(d, allow_nan=False)


def test_tables_have_units_and_bands_around_the_curves(prediction):
    """Compared with the project's own contract of tables."""
    tables = prediction.tables()
    assert list(tables) == [
        "sweep.csv", "spectrum.csv", "relaxation.csv", "flow.csv", "distribution.csv",
    ]  # fmt: skip
    for name, columns in {
        "sweep.csv": ("G' [Pa]", "G'' [Pa]", "|eta*| [Pa s]", "tan delta [-]"),
        "relaxation.csv": ("G [Pa]",),
        "flow.csv": ("eta [Pa s]",),
        "spectrum.csv": ("g [Pa]",),
    }.items():
        t = tables[name]
        assert np.all(np.isfinite(t.to_numpy(dtype=float)))
        for c in columns:
            quantity, unit = c.split(" [")
            low, high = t[f"{quantity} low [{unit}"], t[f"{quantity} high [{unit}"]
            assert np.all((low <= t[c]) & (t[c] <= high)), c
    w = tables["sweep.csv"]["omega [rad/s]"].to_numpy()
    assert w[0] == pytest.approx(1e-4) and w[-1] == pytest.approx(1e4) and w.size == 81


def test_closed_form_of_the_exponential_kernel():
    """Compared with eta0 = G_N sum w_i w_j T_ij and Je0 from T_ij^2 (derived)."""
    melt = HDPE.melt(190.0)
    p = predict(A, HDPE, kernels=["exponential"], exponent=2.0, rouse=False, members=0)
    tau = relaxation_times(A.molar_mass, melt, Model("exponential", 2.0, False))
    t = 2.0 / (1 / tau[:, None] + 1 / tau)
    w = A.mass
    eta0 = melt.plateau_modulus * (w @ t @ w)
    je0 = (w @ t**2 @ w) / (melt.plateau_modulus * (w @ t @ w) ** 2)
    assert p.outputs.values["eta0_Pa_s"] == pytest.approx(eta0, rel=1e-6)
    assert p.outputs.values["Je0_per_Pa"] == pytest.approx(je0, rel=1e-6)
    table = p.tables()["sweep.csv"]
    x = table["omega [rad/s]"].to_numpy()[:, None, None] * t
    storage = melt.plateau_modulus * np.einsum("i,kij,j->k", w, x * x / (1 + x * x), w)
    assert table["G' [Pa]"].to_numpy() == pytest.approx(storage, rel=1e-4)
    assert p.outputs.bands == {} and p.to_dict()["bands"] is None


@pytest.mark.parametrize("dispersity, ratio", [(1.5, 1.04), (2.0, 1.32), (3.0, 2.0), (4.0, 2.75)])
def test_dispersity_raises_eta0_as_double_reptation_says(dispersity, ratio):
    """Compared with the table of eta0/law(Mw) for log-normal melts, a = 3.6 (derived)."""
    d = lognormal(1e5, dispersity)
    p = predict(d, HDPE, kernels=["exponential"], exponent=2.0, rouse=False, members=0)
    law = HDPE.melt(190.0).law_coefficient * 1e5**3.6
    assert p.outputs.values["eta0_Pa_s"] / law == pytest.approx(ratio, rel=0.02)


@pytest.mark.parametrize("kernel", ["exponential", "reptation", "power-law"])
@pytest.mark.parametrize("exponent", [1.6, 2.0, 2.5])
def test_many_at_once_agree_with_one_by_one(kernel, exponent):
    """Compared with the single-melt prediction, an independent path (derived)."""
    melt = HDPE.melt(190.0)
    w = np.geomspace(1e-2, 1e4, 25)
    one = Relaxation(B, melt, Model(kernel, exponent))
    many = Bank([B], melt, True, 1e4).response(np.ones((1, 1)), kernel, exponent)
    for mine, theirs in zip(many.moduli(w), one.moduli(w), strict=True):
        assert mine[0] == pytest.approx(theirs, rel=3e-3)
    assert many.terminal[0][0] == pytest.approx(one.zero_shear_viscosity, rel=1e-3)
    assert many.terminal[1][0] == pytest.approx(one.recoverable_compliance, rel=2e-3)
    t = np.geomspace(1e-4, 1e2, 13)
    assert many.relaxation(t)[0] == pytest.approx(one.relaxation_modulus(t), rel=3e-3)


def test_the_fluctuation_kernel_joins_where_the_card_names_its_mass():
    """Compared with the single-melt prediction; its anchor depends on M and exponent (derived)."""
    card = HDPE.to_dict()
    card["kernel"] = {"fluctuation_molar_mass_g_per_mol": 2000.0}
    own = Polymer.from_dict(card)
    p = predict(A, own, members=16)
    assert "fluctuation" in p.kernels and "fluctuation" not in predict(A, HDPE, members=0).kernels
    w = np.geomspace(1e-1, 1e3, 9)
    one = Relaxation(A, own.melt(), Model("fluctuation", 2.2)).moduli(w)
    many = Bank([A], own.melt(), True, 1e3).response(np.ones((1, 1)), "fluctuation", 2.2).moduli(w)
    for a, b in zip(one, many, strict=True):
        assert b[0] == pytest.approx(a, rel=5e-3)


@pytest.mark.parametrize("mass", [600.0, 4e3, 5e6])
def test_melts_at_the_edge_of_the_model(mass):
    """Compared with the contract: finite or null, whatever the chains (unentangled, enormous)."""
    p = predict(lognormal(mass, 1.8), HDPE, members=8)
    json.dumps(p.to_dict(), allow_nan=False)
    for table in p.tables().values():
        assert np.all(np.isfinite(table.to_numpy(dtype=float)))


def test_two_hundred_members_are_quick(full):
    """Compared with the target: 200 members within 2 s."""
    if not full:
        pytest.skip("a timing: runs with --full")
    predict(B, HDPE)
    start = time.perf_counter()
    predict(B, HDPE)
    assert time.perf_counter() - start < 2.0


def test_a_time_law_factor_only_moves_times():
    """Compared with the melt of a multiplied law, computed anew (derived)."""
    melt = HDPE.melt(190.0)
    w = np.geomspace(1e-2, 1e3, 11)
    moved = Bank([B], melt).response(np.ones((1, 1)), "reptation", 2.2, time_factor=1.7)
    anew = Bank([B], melt.with_(time_factor=1.7)).response(np.ones((1, 1)), "reptation", 2.2)
    assert moved.moduli(w)[1][0] == pytest.approx(anew.moduli(w)[1][0], rel=1e-3)


def test_melt_flow_rate_of_many_equals_that_of_one():
    """Compared with the flow integral over a fine rate grid, written independently (derived)."""
    melt = HDPE.melt(190.0)
    r = Bank([B], melt).response(np.ones((1, 1)), "power-law", 2.0)
    w = inner_frequencies(1e-5, 1e4, melt)
    curves = r.curves(w)

    def viscosity(rate):
        up, out = r.moduli(np.atleast_1d(rate))
        return np.hypot(up[0], out[0]) / rate

    for load in (2.16, 21.6):
        fast = melt_flow_rates(curves, load, 759.0)[0]
        assert fast == pytest.approx(melt_flow_rate(viscosity, load, 759.0), rel=2e-3)


def test_newtonian_flow_rate():
    """Compared with Q = pi R^4 dp/(8 eta L) (common practice): rate = stress/eta, MFR exact."""
    eta = 1000.0
    w = np.geomspace(1e-3, 1e5, 81)
    one = np.ones(1)
    curves = Curves(w, 1e-9 * w[None, :] ** 2, eta * w[None, :], one * eta, one)
    stress = 2.16 * 9.80665 / (np.pi * 9.474e-3**2 / 4) * (2.095e-3 / 2) / (2 * 8e-3)
    q = np.pi * (2.095e-3 / 2) ** 3 / 4 * stress / eta
    assert melt_flow_rates(curves, 2.16, 759.0)[0] == pytest.approx(600 * 0.759 * q * 1e6, rel=1e-3)


def test_band_of_the_time_law_alone():
    """Compared with the law's normal scatter: 1.645 x 0.1 decades on either side (derived)."""
    p = predict(A, HDPE, kernels=["power-law"], exponent=2.0, members=200)
    u = p.outputs.bands["eta0_Pa_s"]
    assert np.log10(u.high / u.value) == pytest.approx(0.1645, abs=0.006)
    assert np.log10(u.value / u.low) == pytest.approx(0.1645, abs=0.006)
    assert u.budget["time_law"] == pytest.approx(1.0, abs=0.02)


def test_the_exponent_takes_most_of_the_band_of_a_broad_melt():
    """Compared with the derived sensitivity: 0.2 in the exponent moves broad melts most."""
    p = predict(lognormal(1.2e5, 5.0), HDPE)
    shares = p.outputs.bands["eta0_Pa_s"].budget
    assert sum(shares.values()) == pytest.approx(1.0)
    assert shares["exponent"] > 0.5


def test_where_the_exponent_comes_from():
    """Compared with the documented order: asked for, card, prior 2.0 +- 0.2."""
    melt = HDPE.melt(190.0)
    assert exponent_belief(melt).spread == 0.2
    assert exponent_belief(melt, 2.3).fixed
    assert exponent_belief(melt, (1.8, 2.2)).at([0.0, 1.0]) == pytest.approx([1.8, 2.2])
    card = HDPE.to_dict()
    card["kernel"] = {"mixing_exponent": 2.2, "mixing_exponent_range": [2.1, 2.4]}
    own = Polymer.from_dict(card)
    p = predict(A, own, members=20)
    assert p.model.exponent == 2.2 and "card" in p.belief.source
    for bad in (0.5, 9.0, (2.0, 1.0)):
        with pytest.raises(ModelError):
            exponent_belief(melt, bad)


def test_a_disputed_plateau_modulus_widens_the_band():
    """Compared with the card without its range (derived)."""
    card = HDPE.to_dict()
    card["network"]["plateau_modulus_range_Pa"] = [1.4e6, 1.8e6]
    wide = predict(A, Polymer.from_dict(card), exponent=2.0, kernels=["power-law"])
    narrow = predict(A, HDPE, exponent=2.0, kernels=["power-law"])
    a, b = (p.outputs.bands["crossover_G_Pa"] for p in (wide, narrow))
    assert a.high / a.low > 1.15 > b.high / b.low
    assert a.budget["card"] > 0.9


def test_members_fill_the_latin_square():
    """Compared with what even spreading promises: quantiles of each source are met."""
    melt = HDPE.melt(190.0)
    d = draw(melt, ("exponential", "reptation"), exponent_belief(melt), 200, 3)
    assert sum(k == "reptation" for k in d.kernel) == 100
    assert np.mean(d.exponent) == pytest.approx(2.0, abs=0.005)
    assert np.std(np.log10(d.time_factor)) == pytest.approx(0.1, rel=0.03)


def test_same_seed_same_result_other_seed_nearly_so(prediction):
    """Compared with itself: byte for byte with the seed, within sampling error without."""
    again = predict(B, HDPE, temperature_C=190.0)
    assert json.dumps(again.to_dict()) == json.dumps(prediction.to_dict())
    other = predict(B, HDPE, temperature_C=190.0, seed=1)
    a, b = (p.outputs.bands["eta0_Pa_s"] for p in (prediction, other))
    assert a.high == pytest.approx(b.high, rel=0.25)


def test_frequencies_asked_for_are_given_and_bad_ones_refused():
    """Compared with the contract of `omega`."""
    p = predict(A, HDPE, omega=np.array([0.1, 1.0, 10.0]), members=0)
    assert p.tables()["sweep.csv"]["omega [rad/s]"].tolist() == [0.1, 1.0, 10.0]
    for bad in ([1.0], [1.0, 1.0], [-1.0, 1.0], [1.0, np.nan]):
        with pytest.raises(InputError):
            predict(A, HDPE, omega=bad, members=0)


def test_words_say_kernel_exponent_and_what_is_not_in_the_band(prediction):
    """Compared with the promise that defaults are said."""
    text = prediction.paragraph()
    assert "power-law" in text and "exponent of 2" in text and "3 kernels" in text
    assert any("GPC" in s for s in prediction.cannot_say())


def test_what_is_out_of_reach_is_null():
    """Compared with the contract: numbers are finite or null."""
    stiff = Distribution.from_averages(Mw=3e6, dispersity=1.2)
    p = predict(stiff, HDPE, members=0)
    json.dumps(p.to_dict(), allow_nan=False)
    flat = Curves(np.geomspace(1, 10, 11), np.full((1, 11), 2e5), np.full((1, 11), 1e3),
                  np.ones(1), np.ones(1))  # fmt: skip
    values = properties_of(flat, 759.0)
    assert np.isnan(values["crossover_omega_rad_per_s"][0])
    assert np.isnan(values["MFR_g_per_10min@2.16"][0])
    assert np.isnan(values["viscosity_Pa_s@0.1"][0])


@pytest.mark.parametrize("cell", [0, 1, 5, 9, 10])
def test_a_crossover_is_found_in_the_first_and_the_last_cell_too(cell):
    """G'/G'' = omega/omega_x crosses at omega_x, wherever that lies (derived)."""
    from mwdlink.decisions.properties import crossovers

    omega = np.geomspace(1.0, 1e3, 12)
    at = omega[cell] * (omega[1] / omega[0]) ** 0.6
    loss = 1e3 * np.ones((1, 12))
    one = np.ones(1)
    found, level = crossovers(Curves(omega, loss * omega / at, loss, one, one))
    assert found[0] == pytest.approx(at, rel=1e-6)
    assert level[0] == pytest.approx(1e3, rel=1e-6)


def test_what_is_no_polymer_or_distribution_is_refused_with_what_to_do():
    """House rule: errors say what to do; a name is no polymer yet."""
    from mwdlink.decisions.blend import blend
    from mwdlink.decisions.rest import rest_time
    from mwdlink.inversion.invert import invert
    from mwdlink.measurement.sweep import Sweep

    omega = np.geomspace(0.1, 100, 8)
    sweep = Sweep(omega, 10 * omega, 20 * omega)
    for call in (
        lambda: predict(A, "hdpe", members=0),
        lambda: blend([A, B], [0.5, 0.5], "hdpe", members=0),
        lambda: rest_time(A, "hdpe", members=0),
        lambda: invert(sweep, "hdpe", members=0),
    ):
        with pytest.raises(InputError, match="not 'hdpe'") as caught:
            call()
        assert "read_polymer" in caught.value.remedy
    with pytest.raises(InputError, match="needs a distribution, not Sweep"):
        predict(sweep, HDPE, members=0)


def test_an_exponent_nobody_fitted_is_said() -> None:
    """Beyond the 3.84 of Maier et al., J. Rheol. 42 (1998) 1153 (recalled), with a caution."""
    for exponent, said in ((2.25, False), (5.0, True)):
        result = predict(A, HDPE, exponent=exponent, members=0)
        assert ("exponent_unusual" in {c.code for c in result.warnings}) == said
