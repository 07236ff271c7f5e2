"""`invert` end to end: accuracy, statuses, kernels, budget, determinism, refusals."""

from __future__ import annotations

import json
from concurrent.futures import ProcessPoolExecutor

import numpy as np
import pytest
from melts import FAMILIES, exact_card, mean_within, measured, melt_of

from mwdlink.chains import families
from mwdlink.chains.polymer import builtin
from mwdlink.errors import InputError, ModelError, NotConverged
from mwdlink.inversion.invert import invert
from mwdlink.measurement.sweep import Sweep
from mwdlink.relaxation.mixing import Model

CARD = exact_card()


def _one(chains, seed=0, model=None, **options):
    model = model or Model()
    rng = np.random.default_rng(seed)
    sweep = measured(chains, options.pop("card", CARD), model, rng, **options)
    return sweep


@pytest.fixture(scope="module")
def default_result():
    sweep = _one(families.lognormal(1.2e5, 3.0))
    return sweep, invert(sweep, exact_card(0.1), members=120, above=(5e5, 1e7))


def test_round_trip_over_seeded_melts():
    """Predict, add 3 % noise, invert: 32 melts of four families with known truth (derived).

    Asked: median error of Mw within the window <= 1.5 %, 90th percentile <= 5 %; of the weight
    above 5e5 g/mol median <= 0.2 wt%, worst <= 1.2 wt%; 90 % intervals cover >= 80 %. With 32
    melts a true cover of 0.90 falls below 0.75 once in 150 runs: that is the bound here, the full
    study (docs/accuracy.md) holds the figure itself.
    """
    mass, tail, covered = [], [], []
    for i in range(32):
        family = FAMILIES[i % 4]
        rng = np.random.default_rng([11, i])
        chains = melt_of(family, rng)
        sweep = measured(chains, CARD, Model(), rng)
        r = invert(
            sweep, CARD, kernels=["power-law"], exponent=2.0, noise=0.03, members=60, above=(5e5,)
        )
        truth = mean_within(chains, *r.window)
        u = r.averages["Mw_within_window_g_per_mol"]
        mass.append(abs(u.value / truth - 1))
        covered.append(u.low <= truth <= u.high)
        true = chains.weight_above(5e5)
        v = r.above[0][1]
        tail.append(abs(v.value - true))
        covered.append(v.low <= true <= v.high)
    assert np.median(mass) <= 0.015 and np.quantile(mass, 0.9) <= 0.05
    assert np.median(tail) <= 0.002 and max(tail) <= 0.012
    assert np.mean(covered) >= 0.75


def test_weight_outside_the_window_makes_bounds():
    """3 wt% at 3e6 g/mol beyond the window: Mz not resolved, the weight right (derived)."""
    chains = families.mixture_of_lognormals([1.1e5, 3e6], [3.0, 1.1], [0.97, 0.03])
    sweep = _one(chains, low=0.05, high=1e3)
    r = invert(sweep, CARD, kernels=["power-law"], exponent=2.0, noise=0.03, members=100)
    assert r.window[1] < 1e6
    assert r.averages["Mz_g_per_mol"].status == "lower_bound"
    assert r.averages["Mz_g_per_mol"].high < chains.Mz
    assert r.averages["Mw_g_per_mol"].status == "lower_bound"
    assert r.outside["above"].value == pytest.approx(chains.weight_above(r.window[1]), abs=0.005)
    assert any("lower bound" in text for text in r.cannot_say())


def test_mn_is_never_resolved(default_result):
    """Short chains only dilute: Mn is an upper bound or assumed."""
    _, r = default_result
    assert r.averages["Mn_g_per_mol"].status in ("upper_bound", "assumed")


def test_weight_beyond_the_window_is_a_bound(default_result):
    """A molar mass beyond the window has no resolved weight above it."""
    _, r = default_result
    m, v = r.above[1]
    assert m == 1e7 and v.status == "upper_bound" and v.low == 0.0


@pytest.mark.parametrize("kernel", ["exponential", "reptation", "power-law", "fluctuation"])
def test_data_of_every_kernel_read_by_default(kernel):
    """Each kernel's data read with all kernels: the true Mw lies in the interval (derived).

    The kernel that made the data must be admissible.
    """
    card = exact_card(0.0, fluctuation_molar_mass_g_per_mol=1.2e4)
    chains = families.lognormal(1.3e5, 3.0)
    sweep = _one(chains, 3, Model(kernel), card=card)
    r = invert(sweep, card, members=120, noise=0.03)
    u = r.averages["Mw_g_per_mol"]
    assert u.low <= chains.Mw <= u.high
    row = next(k for k in r.kernels if k["kernel"] == kernel)
    assert row["admissible"]
    assert len(r.kernels) == 4


def test_impossible_kernels_are_rejected():
    """Narrow single-exponential melts are too narrow for the power-law kernel (measured:
    chi2 of 4 and more); a rejected kernel stays in the table and out of the interval."""
    sweep = _one(families.lognormal(2e5, 1.1), 1, Model("exponential"), noise=0.02)
    r = invert(sweep, CARD, exponent=2.0, noise=0.02, members=60)
    state = {k["kernel"]: k["admissible"] for k in r.kernels}
    assert state["exponential"] and not state["power-law"]
    assert next(k for k in r.kernels if k["kernel"] == "power-law")["chi2_per_point"] > 2
    assert set(r.members["kernel"]) == {k for k, ok in state.items() if ok}


def test_budget_shares_add_up_and_name_the_cause(default_result):
    """With the card's scatter and an uncertain exponent these rule Mw; shares sum to 1."""
    _, r = default_result
    budget = r.averages["Mw_g_per_mol"].budget
    assert sum(budget.values()) == pytest.approx(1.0)
    assert budget["exponent"] + budget["time_law"] > 0.5
    fixed = invert(
        default_result[0], CARD, kernels=["power-law"], exponent=2.0, members=60
    ).averages["Mw_g_per_mol"]
    assert fixed.budget["exponent"] == 0.0 and fixed.budget["kernel"] == 0.0


def test_time_law_scatter_moves_molar_mass_as_the_law_says():
    """sd of ln M = scatter ln10/a from the time law alone (derived)."""
    sweep = _one(families.lognormal(1.2e5, 3.0))
    r = invert(sweep, exact_card(0.2), kernels=["power-law"], exponent=2.0, members=400)
    spread = np.std(np.log(r.members["Mw [g/mol]"]))
    assert spread == pytest.approx(0.2 * np.log(10) / 3.6, rel=0.15)


def test_a_range_of_the_plateau_modulus_takes_part():
    """A card with 3.5e5 to 4.3e5 Pa: members use both ends, the weight below feels it."""
    card = builtin("pp-isotactic")
    rng = np.random.default_rng(1)
    sweep = measured(families.lognormal(3e5, 4.0), card, Model(), rng)
    r = invert(sweep, card, kernels=["power-law"], exponent=2.0, members=120, noise=0.03)
    factors = set(np.round(r.members["plateau modulus factor [-]"], 2))
    assert factors == {0.9, 1.0, 1.1}
    assert r.outside["below"].budget["card"] > 0.0


def test_result_is_complete_and_plain(default_result):
    """Keys of the contract, finite or null numbers, JSON without NaN."""
    _, r = default_result
    d = r.to_dict()
    json.dumps(d, allow_nan=False)
    for key in (
        "averages", "window", "outside_window", "above", "fit", "kernels", "cross_check", "peaks",
        "advice", "warnings", "model", "seed",
    ):  # fmt: skip
        assert key in d
    assert set(d["averages"]) == {
        "Mn_g_per_mol", "Mw_g_per_mol", "Mz_g_per_mol", "dispersity", "Mw_within_window_g_per_mol"
    }  # fmt: skip
    assert set(r.tables()) == {"distribution.csv", "fit.csv", "smoothing.csv", "members.csv"}
    assert len(r.tables()["smoothing.csv"]) == 17
    assert r.fit["converged"] is True
    assert "g/mol" in r.answer()
    assert "branching" in " ".join(r.cannot_say())


def test_same_input_same_output_and_workers_do_not_matter(default_result):
    """Determinism: twice alone and once over two processes, identical dictionaries."""
    sweep, first = default_result
    with ProcessPoolExecutor(2) as pool:
        again = invert(sweep, exact_card(0.1), members=120, above=(5e5, 1e7), executor=pool)
    assert json.dumps(first.to_dict()) == json.dumps(again.to_dict())
    other = invert(sweep, exact_card(0.1), members=120, above=(5e5, 1e7), seed=1)
    assert other.to_dict()["averages"] != first.to_dict()["averages"]


def test_no_members_no_intervals():
    """members=0: values without intervals."""
    r = invert(_one(families.lognormal(1.2e5, 3.0)), CARD, members=0)
    u = r.averages["Mw_g_per_mol"]
    assert u.low is None and u.high is None and u.value == pytest.approx(1.2e5, rel=0.1)
    assert "dW/dlog10M low" not in r.tables()["distribution.csv"]


def test_misfit_is_explained_and_widens_the_intervals():
    """Noise stated at a tenth of what it is: said, inflated, intervals as wide as they should."""
    sweep = _one(families.lognormal(1.2e5, 3.0), noise=0.05)
    kw = dict(kernels=["power-law"], exponent=2.0, members=100)
    honest = invert(sweep, CARD, noise=0.05, **kw).averages["Mw_within_window_g_per_mol"]
    r = invert(sweep, CARD, noise=0.005, **kw)
    wide = r.averages["Mw_within_window_g_per_mol"]
    assert {"noise_inflated", "chi2"} <= {w.code for w in r.warnings}
    assert (wide.high - wide.low) / (honest.high - honest.low) == pytest.approx(1.0, abs=0.5)


def test_a_fit_that_did_not_converge_is_no_result(monkeypatch):
    """NotConverged carries the partial result."""
    monkeypatch.setattr("mwdlink.inversion.solve.MAX_STEPS", 1)
    with pytest.raises(NotConverged) as error:
        invert(_one(families.lognormal(1.2e5, 3.0)), CARD, kernels=["power-law"], members=0)
    assert error.value.partial is not None and not error.value.partial.fit["converged"]


@pytest.mark.parametrize("method", ["tikhonov", "mixture", "generalised-exponential"])
def test_other_methods_give_the_same_kind_of_result(method):
    """Other methods on a log-normal: Mw within 3 % of the truth (derived; each method holds it)."""
    chains = families.lognormal(1.3e5, 2.5)
    r = invert(
        _one(chains), CARD, kernels=["power-law"], exponent=2.0, method=method, members=20,
        noise=0.03,
    )  # fmt: skip
    assert r.fit["method"] == method
    truth = mean_within(chains, *r.window)
    value = r.averages["Mw_within_window_g_per_mol"].value
    assert value == pytest.approx(truth, rel=0.03)


def test_refusals_teach():
    """Bad arguments: what is wrong and what to do."""
    sweep = _one(families.lognormal(1.2e5, 3.0))
    few = Sweep(omega=[0.1, 1, 10], storage=[1, 2, 3], loss=[2, 3, 4])
    with pytest.raises(InputError, match="too few"):
        invert(few, CARD)
    with pytest.raises(InputError, match="tikhonov's"):
        invert(sweep, CARD, choose="gcv", members=0)
    with pytest.raises(InputError, match="no smoothing to fix"):
        invert(sweep, CARD, method="mixture", smoothing=1.0, members=0)
    with pytest.raises(InputError, match="smoothing of 1e[+]09"):
        invert(sweep, CARD, smoothing=1e9, members=0, kernels=["power-law"])
    with pytest.raises(InputError, match="unknown method"):
        invert(sweep, CARD, method="magic")
    with pytest.raises(InputError, match="members"):
        invert(sweep, CARD, members=5)
    with pytest.raises(InputError, match="positive"):
        invert(sweep, CARD, above=(-1.0,))
    with pytest.raises(ModelError, match="fluctuation_molar_mass"):
        invert(sweep, CARD, kernels=["fluctuation"])
    with pytest.raises(ModelError, match="exponent"):
        invert(sweep, CARD, exponent=0.5)
    with pytest.raises(InputError, match="range"):
        invert(sweep, CARD, exponent=(2.5, 2.0))


def test_temperature_is_asked_for_once():
    """Without any temperature the card's own is taken and said."""
    s = _one(families.lognormal(1.2e5, 3.0))
    bare = Sweep(omega=s.omega, storage=s.storage, loss=s.loss)
    r = invert(bare, CARD, kernels=["power-law"], members=0)
    assert "temperature_assumed" in {w.code for w in r.warnings}
