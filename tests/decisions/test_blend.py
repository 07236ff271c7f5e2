"""Blends: closed forms, both routes, targets, validity, and what a page needs."""

from __future__ import annotations

import json
import time

import numpy as np
import pytest
from decisions.made_up import HDPE, OMEGA, A, B, sweep

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.families import lognormal
from mwdlink.chains.polymer import builtin
from mwdlink.decisions.blend import blend
from mwdlink.decisions.blend_parts import central_map
from mwdlink.decisions.blend_routes import along
from mwdlink.decisions.blend_sweeps import (
    MeasuredBank,
    Quadratic,
    log_additive,
    modes_of,
    root_additive,
)
from mwdlink.decisions.blend_target import find_fractions, parse_target, roots_along
from mwdlink.decisions.components import Component, check_fractions, validity_of
from mwdlink.decisions.response import Bank
from mwdlink.errors import InputError
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model
from mwdlink.relaxation.validity import struglinski_graessley
from mwdlink.report.blend_live import check

MELT = HDPE.melt(190.0)


def chains(mass: float) -> Distribution:
    """Chains of one length."""
    return Distribution.from_nodes([mass * 0.999, mass, mass * 1.001], [1e-9, 1.0, 1e-9])


@pytest.fixture(scope="module")
def by_distributions():
    return blend([A, B], [70, 30], HDPE, target="viscosity_Pa_s@0.1=8e3", members=60)


@pytest.fixture(scope="module")
def by_both():
    rng = np.random.default_rng(5)
    model = Model("reptation", 2.0)
    parts = [Component(d.label, d, sweep(d, model, rng)) for d in (A, B)]
    return blend(parts, [0.7, 0.3], HDPE, members=60)


# -- closed forms ---------------------------------------------------------------------------------
def test_two_monodisperse_components_in_closed_form():
    """Compared with eta0 = G_N sum phi_i phi_j T_ij, T_12 = 2 t1 t2/(t1 + t2) (derived)."""
    one, two = chains(5e4), chains(2e5)
    bank = Bank([one, two], MELT, rouse=False)
    t1, t2 = (MELT.zero_shear_law(m) / MELT.plateau_modulus for m in (5e4, 2e5))
    for phi in (0.0, 0.1, 0.5, 0.9, 1.0):
        r = bank.response(np.array([[1 - phi, phi]]), "exponential", 2.0)
        cross = 2 * t1 * t2 / (t1 + t2)
        first = (1 - phi) ** 2 * t1 + 2 * phi * (1 - phi) * cross + phi**2 * t2
        second = (1 - phi) ** 2 * t1**2 + 2 * phi * (1 - phi) * cross**2 + phi**2 * t2**2
        assert r.terminal[0][0] == pytest.approx(MELT.plateau_modulus * first, rel=1e-4)
        assert r.terminal[1][0] == pytest.approx(second / first**2 / MELT.plateau_modulus, rel=1e-4)


@pytest.mark.parametrize("kernel", ["exponential", "reptation", "power-law"])
def test_exponent_two_is_quadratic_in_the_fraction(kernel):
    """Compared with the blend computed directly, Rouse part and dilution included (derived)."""
    bank = Bank([A, B], MELT)
    three = bank.response(np.array([[1.0, 0], [0, 1], [0.5, 0.5]]), kernel, 2.0)
    w = np.geomspace(1e-3, 1e3, 19)
    q = Quadratic.of(three, w)
    first = np.array([0.0, 0.03, 0.37, 0.8, 1.0])
    direct = bank.response(along(first, np.array([0.5, 0.5])), kernel, 2.0)
    up, out, eta0, je0 = q.curves(first)
    assert up == pytest.approx(direct.moduli(w)[0], rel=1e-4)
    assert out == pytest.approx(direct.moduli(w)[1], rel=1e-4)
    assert eta0 == pytest.approx(direct.terminal[0], rel=1e-8)
    assert je0 == pytest.approx(direct.terminal[1], rel=1e-8)


def test_other_exponents_are_not_quadratic():
    """Compared with the same three-curve form, which must fail here (derived)."""
    bank = Bank([A, B], MELT)
    three = bank.response(np.array([[1.0, 0], [0, 1], [0.5, 0.5]]), "power-law", 2.5)
    q = Quadratic.of(three, np.array([1e-2, 1.0]))
    direct = bank.response(np.array([[0.9, 0.1]]), "power-law", 2.5).terminal[0][0]
    assert abs(q.curves(np.array([0.9]))[2][0] / direct - 1) > 0.1


@pytest.mark.parametrize(
    "base, limits",
    [
        ("monodisperse", {3: 0.019, 5: 0.011, 10: 0.0041, 20: 0.0013}),
        ("log-normal", {3: 0.0059, 5: 0.0027, 10: 0.0014, 20: 0.0008}),
    ],
)
def test_ideal_detection_limits_of_a_tail(base, limits):
    """Compared with the derived table: share at R Mw that lifts eta0 by 5 %, a = 3.4."""
    melt = MELT.with_(law_exponent=3.4)
    d = chains(1e5) if base == "monodisperse" else lognormal(1e5, 2.0)
    for ratio, share in limits.items():
        bank = Bank([d, chains(1e5 * ratio)], melt, rouse=False)
        x = np.concatenate([[0.0], np.geomspace(1e-5, 0.1, 400)])
        eta0 = bank.response(np.stack([1 - x, x], 1), "exponential", 2.0).terminal[0]
        found = np.interp(1.05, eta0 / eta0[0], x)
        # the table has two figures
        assert found == pytest.approx(share, rel=0.09), ratio


def test_published_pair_of_polyisoprene():
    """Compared with Watanabe et al. 2004 (published): 21.4e3 + 308e3, Me 5e3: Gr 0.79, Z 4, 62."""
    assert struglinski_graessley(308e3, 21.4e3, 5e3) == pytest.approx(0.79, abs=0.01)
    assert 21.4e3 / 5e3 == pytest.approx(4, abs=0.5) and round(308e3 / 5e3) == 62
    card = builtin("polyisoprene")
    pair = (
        Component("short", lognormal(21.4e3, 1.04)),
        Component("long", lognormal(308e3, 1.08)),
    )
    v = validity_of(pair, None, card.melt())
    # 0.8 M_e of the card (4.25e3) stands near the 5e3 of the paper
    assert v.Gr == pytest.approx(0.79 * (0.8 * card.entanglement_molar_mass / 5e3) ** 2, rel=0.01)
    assert {w.code for w in v.warnings} >= {"constraint_release", "ratio_beyond_practice"}


# -- classical mixing -----------------------------------------------------------------------------
def test_classical_rules():
    """Compared with their definitions: log-additive, and additive in Mw through eta0^(1/a)."""
    eta0 = np.array([1e3, 1e5])
    assert log_additive([[0.5, 0.5]], eta0)[0] == pytest.approx(1e4)
    law = MELT.zero_shear_law
    pure = np.array([law(6e4), law(2.2e5)])
    mixed = root_additive([[0.7, 0.3]], pure, MELT.law_exponent)[0]
    assert mixed == pytest.approx(law(0.7 * 6e4 + 0.3 * 2.2e5), rel=1e-12)


@pytest.mark.parametrize("kernel", ["exponential", "reptation", "power-law"])
def test_classical_rules_do_worse_on_data_of_every_kernel(kernel):
    """Compared with what a formulator would otherwise use (common practice)."""
    bank = Bank([A, B], MELT)
    x = np.linspace(0.05, 0.95, 19)
    phi = np.stack([1 - x, x], 1)
    true = bank.response(phi, kernel, 2.0).terminal[0]
    pure = bank.response(np.eye(2), kernel, 2.0).terminal[0]

    def error(told):
        return np.sqrt(np.mean(np.log10(told / true) ** 2))

    swept = MeasuredBank(
        [modes_of(sweep(d, Model(kernel, 2.0), np.random.default_rng(i), MELT, W)) for i, d in
         enumerate((A, B))]
    )  # fmt: skip
    rule = error(swept.response(phi, 2.0).terminal[0])
    assert rule < 0.05
    assert error(root_additive(phi, pure, MELT.law_exponent)) > 2 * rule
    assert error(log_additive(phi, pure)) > 5 * rule


W = np.geomspace(1e-3, 1e2, 26)


# -- the route through the components' own spectra ------------------------------------------------
@pytest.mark.parametrize("kernel", ["exponential", "reptation", "power-law"])
def test_component_spectra_predict_blends_of_any_kernel(kernel):
    """Compared with blends made by each kernel, 2 % noise: within 0.03 decades (target)."""
    rng = np.random.default_rng(11)
    model = Model(kernel, 2.0)
    bank = MeasuredBank([modes_of(sweep(d, model, rng)) for d in (A, B)])
    for p in (0.05, 0.25, 0.5, 0.75, 0.95):
        d = Distribution.blend([(A, 1 - p), (B, p)])
        up, out = Relaxation(d, MELT, model).moduli(OMEGA)
        told = bank.response(np.array([[1 - p, p]]), 2.0).moduli(OMEGA)
        for a, b in ((told[0][0], up), (told[1][0], out)):
            assert np.abs(np.log10(a / b)).max() < 0.03


def test_pure_components_are_their_own_blend():
    """Compared with the component's fitted spectrum, for any exponent (derived)."""
    rng = np.random.default_rng(2)
    modes = [modes_of(sweep(d, Model("reptation", 2.0), rng)) for d in (A, B)]
    bank = MeasuredBank(modes)
    for exponent in (1.0, 2.0, 3.3):
        r = bank.response(np.eye(2), exponent)
        for i, m in enumerate(modes):
            assert r.moduli(OMEGA)[1][i] == pytest.approx(m.moduli(OMEGA)[1], rel=2e-3)
            assert r.terminal[0][i] == pytest.approx(m.eta0, rel=1e-3)


def test_both_routes_and_their_difference(by_both):
    """Compared with each other: kernels differ, so do the routes, but not by much here."""
    d = by_both.to_dict()["blend"]
    assert d["route"] == "sweeps" and d["routes_differ"]["other_route"] == "distributions"
    assert 0.0 < d["routes_differ"]["loss_decades"] < 0.15
    through = blend(by_both.components, [0.7, 0.3], HDPE, route="distributions", members=0)
    assert through.route == "distributions"


def test_components_short_of_terminal_flow_give_lower_bounds(by_both):
    """Compared with |eta*| <= eta0 for any positive spectrum (derived)."""
    codes = {w.code for w in by_both.warnings}
    assert "components_not_terminal" in codes
    eta0 = by_both.outputs.bands["eta0_Pa_s"]
    true = Relaxation(
        Distribution.blend([(A, 0.7), (B, 0.3)]), MELT, Model("reptation", 2.0)
    ).zero_shear_viscosity
    assert eta0.status == "lower_bound" and eta0.value < true * 1.03
    quick = blend(by_both.components, [0.7, 0.3], HDPE, members=0)
    assert any("entrance" in s for s in by_both.cannot_say())
    assert "at least" in by_both.answer() and "at least" in quick.answer()


# -- the result -----------------------------------------------------------------------------------
def test_keys_and_tables_of_the_contract(by_distributions):
    """Compared with the project's contract of keys and tables."""
    d = by_distributions.to_dict()
    json.dumps(d, allow_nan=False)
    assert d["blend"]["fractions"] == {"A": 0.7, "B": 0.3}
    assert set(d["target"]) >= {"quantity", "wanted", "fractions", "reachable", "reason"}
    tables = by_distributions.tables()
    f = tables["fractions.csv"]
    assert len(f) == 101 and f["fraction A [-]"].iloc[-1] == 1.0
    for header in (
        "eta0 [Pa s]",
        "MFR 2.16 kg [g/10 min]",
        "tan delta 0.1 rad/s [-]",
        "crossover omega [rad/s]",
        "viscosity 1 rad/s [Pa s]",
        "Je0 [1/Pa]",
    ):
        name, unit = header.split(" [")
        assert np.all(f[f"{name} low [{unit}"] <= f[header] * (1 + 1e-12))
        assert np.all(f[header] <= f[f"{name} high [{unit}"] * (1 + 1e-12))
    assert {"sweep.csv", "spectrum.csv", "relaxation.csv", "flow.csv", "distribution.csv",
            "classical.csv"} <= set(tables)  # fmt: skip
    at = f[np.isclose(f["fraction A [-]"], 0.7)]
    assert at["eta0 [Pa s]"].iloc[0] == pytest.approx(d["terminal"]["eta0_Pa_s"], rel=1e-4)


def test_averages_are_those_of_the_blended_distribution(by_distributions):
    """Compared with Mw = sum phi Mw_i and 1/Mn = sum phi/Mn_i (derived)."""
    a = by_distributions.to_dict()["averages"]
    assert a["Mw_g_per_mol"] == pytest.approx(0.7 * A.Mw + 0.3 * B.Mw, rel=1e-6)
    assert 1 / a["Mn_g_per_mol"] == pytest.approx(0.7 / A.Mn + 0.3 / B.Mn, rel=1e-6)


def test_live_data_says_what_is_a_bound() -> None:
    """Sweeps that stop short of terminal flow: eta0 is at least so much beside the slider too."""
    wide, short = np.geomspace(1e-4, 1e2, 31), np.geomspace(1.0, 1e3, 16)
    for omega, bound in ((wide, False), (short, True)):
        rng = np.random.default_rng(3)
        parts = [sweep(d, Model(), rng, omega=omega) for d in (A, B)]
        data = check(blend(parts, (0.5, 0.5), HDPE, members=0).live_data())
        label = next(p["label"] for p in data["properties"] if p["key"] == "eta0_Pa_s")
        assert label.endswith(", at least") == bound


def test_live_data_is_accepted_by_the_page(by_distributions, by_both):
    """Compared with the page's own check of its data, and the quadratic form with the curve."""
    for result in (by_distributions, by_both):
        data = check(result.live_data())
        assert data["mode"] == "quadratic" and len(json.dumps(data)) < 200_000
        c, phi = data["curves"], data["fraction"]
        loss = (
            phi**2 * np.array(c["first"]["loss"])
            + (1 - phi) ** 2 * np.array(c["second"]["loss"])
            + 2 * phi * (1 - phi) * np.array(c["cross"]["loss"])
        )
        table = result.outputs.curves["sweep.csv"]
        assert loss == pytest.approx(np.asarray(table["G'' [Pa]"]), rel=1e-3)
    other = blend([A, B], [0.5, 0.5], HDPE, exponent=2.3, members=0)
    assert check(other.live_data())["mode"] == "grid"
    three = blend([A, B, lognormal(1e5, 2.0)], [0.5, 0.3, 0.2], HDPE, members=0)
    assert three.live_data() is None


def test_three_components_keep_the_others_proportions():
    """Compared with the documented meaning of the fraction's line."""
    rows = along(np.array([0.0, 0.4]), np.array([0.5, 0.3, 0.2]))
    assert rows == pytest.approx(np.array([[0, 0.6, 0.4], [0.4, 0.36, 0.24]]))


# -- targets --------------------------------------------------------------------------------------
@pytest.mark.parametrize(
    "text, key, wanted",
    [
        ("viscosity_Pa_s@0.1=2e4", "viscosity_Pa_s@0.1", 2e4),
        ("eta0_Pa_s=1e4", "eta0_Pa_s", 1e4),
        ("MFR_g_per_10min@2.16=1.5", "MFR_g_per_10min@2.16", 1.5),
        ("tan_delta@0.1 = 3", "tan_delta@0.1", 3.0),
        ("crossover_omega_rad_per_s=20", "crossover_omega_rad_per_s", 20.0),
    ],
)
def test_target_forms(text, key, wanted):
    """Compared with the contract of --target."""
    t = parse_target(text)
    assert (t.key, t.wanted) == (key, wanted)


@pytest.mark.parametrize(
    "text",
    ["eta0=1", "viscosity_Pa_s=3", "eta0_Pa_s@1=3", "eta0_Pa_s=-1", "tan_delta@x=1", "", "="],
)
def test_bad_targets_are_refused(text):
    """Compared with the contract of --target."""
    with pytest.raises(InputError):
        parse_target(text)


def test_the_target_is_met_where_it_says(by_distributions):
    """Compared with a blend of the found fraction, predicted anew."""
    f = by_distributions.target.fractions[0]
    assert f.low < f.value < f.high
    again = blend([A, B], [f.value, 1 - f.value], HDPE, members=0)
    assert again.outputs.values["viscosity_Pa_s@0.1"] == pytest.approx(8e3, rel=5e-3)


@pytest.mark.parametrize(
    "target", ["MFR_g_per_10min@5=3", "crossover_omega_rad_per_s=100", "tan_delta@2=1.8"]
)
def test_other_targets(target):
    """Compared with the property at the found fraction, frequencies and loads not in the list."""
    r = blend([A, B], None, HDPE, target=target, members=0)
    assert len(r.target.fractions) == 1
    p = r.target.fractions[0].value
    again = blend([A, B], [p, 1 - p], HDPE, target=target, members=0)
    assert again.outputs.values[again.target.target.key] == pytest.approx(
        again.target.target.wanted, rel=5e-3
    )


def test_a_target_out_of_reach_says_so():
    """Compared with the components' own values: met only outside 0 to 1 is no fraction."""
    r = blend([A, B], None, HDPE, target="eta0_Pa_s=1e9", members=20)
    assert r.target.fractions == () and "No fraction" in r.target.reason
    low, high = r.target.reachable
    values = r.map.values["eta0_Pa_s"]
    assert (low, high) == (pytest.approx(values.min()), pytest.approx(values.max()))


def test_several_fractions_for_one_value():
    """Compared with a property that has a maximum inside (made up)."""
    phi = np.linspace(0, 1, 101)
    humped = 1 + 4 * phi * (1 - phi)
    assert roots_along(phi, humped, 1.64) == pytest.approx([0.2, 0.8], abs=1e-3)
    members = np.stack([humped * 0.97, humped * 1.03])
    t = find_fractions(parse_target("Je0_per_Pa=1.64"), "A", phi, humped, phi, members, ["B"])
    assert len(t.fractions) == 2 and "2 fractions" in t.reason
    assert t.fractions[0].low < 0.2 < t.fractions[0].high
    assert roots_along(phi, phi + 1, 1.0) == [0.0] and roots_along(phi, phi + 1, 2.0) == [1.0]


def test_members_that_cannot_reach_the_target_widen_its_interval_to_the_end():
    """Compared with members of which half would need less than nothing of A (made up)."""
    phi = np.linspace(0, 1, 101)
    falling = 10.0 ** (2 - phi)
    members = np.stack([falling * f for f in (0.5, 0.6, 0.9, 1.05, 1.1, 1.2)])
    t = find_fractions(parse_target("eta0_Pa_s=95"), "A", phi, falling, phi, members, ["B"])
    f = t.fractions[0]
    assert f.low == 0.0 and f.value == pytest.approx(np.log10(100 / 95), abs=1e-3)
    assert t.shares[0] == pytest.approx(0.5) and "Only 50 %" in t.reason


# -- what is refused or warned of -----------------------------------------------------------------
def test_fractions_sum_to_one_or_hundred():
    """Compared with the contract of --fractions."""
    assert check_fractions([70, 30], 2) == pytest.approx([0.7, 0.3])
    for bad in ([0.7, 0.2], [1.2, -0.2], [50, 30, 20], [0.0, 0.0]):
        with pytest.raises(InputError):
            check_fractions(bad, 2)


def test_other_polymers_are_refused_and_odd_components_warned_of():
    """Compared with the documented limits of the rule."""
    with pytest.raises(InputError, match="different polymers"):
        blend([Component("A", A, polymer="polystyrene"), Component("B", B)], [1, 1e-9], HDPE)
    odd = [Component("A", A, branched=True, filler=0.3), Component("B", lognormal(3e3, 1.5))]
    codes = {w.code for w in blend(odd, [0.5, 0.5], HDPE, members=0).warnings}
    assert codes >= {"component_branched", "component_filled", "component_unentangled",
                     "ratio_beyond_practice"}  # fmt: skip


def test_no_common_route_is_refused():
    """Compared with the contract: one of distribution and sweep for every component."""
    s = sweep(B, Model("reptation", 2.0), np.random.default_rng(0))
    with pytest.raises(InputError, match="no common route"):
        blend([A, s], [0.5, 0.5], HDPE)
    with pytest.raises(InputError, match="at least two"):
        blend([A], [1.0], HDPE)


def test_sweeps_at_another_temperature_are_shifted():
    """Compared with a_T of the card's Arrhenius law (derived)."""
    s = sweep(A, Model("reptation", 2.0), np.random.default_rng(0))
    cold = s.shifted(1 / HDPE.melt(170.0).a_T).with_(temperature_C=170.0)
    parts = [Component("A", None, cold), Component("B", None, s.with_(label="B"))]
    r = blend(parts, [1.0, 0.0], HDPE, members=0)
    assert "sweep_shifted" in {w.code for w in r.warnings}
    told = r.components[0].sweep
    assert told.omega == pytest.approx(s.omega, rel=1e-9)


def test_the_map_of_all_fractions_is_quick(full, by_distributions):
    """Compared with the target: 101 fractions, all properties, two components, 0.2 s."""
    c = by_distributions.computed

    def once(belief):
        start = time.perf_counter()
        central_map(c.central, by_distributions.fractions, c.omega, 759.0, (2.16, 5.0, 21.6),
                     (0.1, 1.0, 10.0, 100.0), lambda x: x, belief)  # fmt: skip
        return time.perf_counter() - start

    best = min(once(c.belief) for _ in range(3))
    if full:
        assert best < 0.2
    assert best < 5.0
