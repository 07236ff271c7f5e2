"""Relaxation spectrum of a sweep without a chain model."""

from __future__ import annotations

import importlib.util
import json
import sys
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest

from mwdlink.errors import InputError
from mwdlink.measurement.continuous import shares_that_repeat
from mwdlink.measurement.spectrum_fit import fit_spectrum, supported_range
from mwdlink.measurement.sweep import Sweep
from mwdlink.relaxation.spectrum import Spectrum

TAU = np.logspace(-5, 2.5, 301)
STEP = np.log(TAU[1] / TAU[0])


def log_normal(tau: np.ndarray) -> np.ndarray:
    """An invented spectrum with a closed form, H [Pa]: its peak at 0.1 s, a decade wide."""
    return 2e4 * np.exp(-0.5 * (np.log10(tau / 0.1) / 0.8) ** 2)


MELT = Spectrum(TAU, log_normal(TAU) * STEP)


def sweep(
    low: float, high: float, noise: float = 0.03, seed: int = 0, per_decade: int = 5
) -> Sweep:
    rng = np.random.default_rng(seed)
    omega = np.logspace(low, high, int((high - low) * per_decade) + 1)
    storage, loss = MELT.moduli(omega)
    return Sweep(
        omega,
        storage * np.exp(noise * rng.standard_normal(omega.size)),
        loss * np.exp(noise * rng.standard_normal(omega.size)),
        temperature_C=190.0,
    )


@pytest.fixture(scope="module")
def whole():
    return fit_spectrum(sweep(-3, 3), members=80)


@pytest.fixture(scope="module")
def cut():
    return fit_spectrum(sweep(0, 3), members=80)


def test_supported_range():
    """Recalled (Davies & Anderssen 1997): exp(pi/2)/omega_max to exp(-pi/2)/omega_min."""
    low, high = supported_range(np.array([0.01, 100.0]))
    assert low == pytest.approx(0.0481, rel=1e-3)
    assert high == pytest.approx(20.79, rel=1e-3)
    # 0.68 decade is lost at each end
    assert np.log10(100.0 * low) == pytest.approx(0.682, abs=1e-3)


def test_continuous_spectrum_is_right_inside():
    """Derived: over six sweeps a log-normal spectrum comes back to 3 % (root mean square) wherever
    the data support it and H is above a hundredth of its peak; the 90 % band holds it as often.
    """
    errors, held = [], []
    for seed in range(6):
        fit = fit_spectrum(sweep(-3, 3, seed=seed), members=40, noise=0.03)
        c, true = fit.continuous, log_normal(fit.continuous.tau)
        seen = fit.supported_mask & (true > 0.01 * true.max())
        assert seen.sum() > 30
        errors.append(np.log(c.H[seen] / true[seen]))
        held.append((c.low[seen] <= true[seen]) & (true[seen] <= c.high[seen]))
        assert np.all(c.low <= c.H) and np.all(c.H <= c.high)
    assert np.sqrt(np.mean(np.square(errors))) < 0.03
    assert np.mean(held) > 0.75


def test_terminal_values(whole):
    """Derived: eta0 = sum g tau and Je0 = sum g tau^2/eta0^2 within their intervals' reach."""
    eta0, je0 = whole.bands["eta0_Pa_s"], whole.bands["Je0_per_Pa"]
    assert eta0.status == je0.status == "resolved"
    assert eta0.value == pytest.approx(MELT.zero_shear_viscosity, rel=0.02)
    assert je0.value == pytest.approx(MELT.recoverable_compliance, rel=0.06)
    assert eta0.low < eta0.value < eta0.high
    assert not any(w.code == "terminal_not_reached" for w in whole.warnings)


def test_window_short_of_terminal_flow_gives_bounds(cut):
    """Derived: |eta*|(omega) <= eta0 and G'/|G*|^2 <= Je0 for every positive spectrum."""
    for key, true in (
        ("eta0_Pa_s", MELT.zero_shear_viscosity),
        ("Je0_per_Pa", MELT.recoverable_compliance),
        ("mean_time_s", MELT.mean_time),
    ):
        q = cut.bands[key]
        assert q.status == "lower_bound"
        assert q.value < true
        assert q.low <= q.value <= q.high
    assert cut.bands["eta0_Pa_s"].value > 0.3 * MELT.zero_shear_viscosity
    assert any(w.code == "terminal_not_reached" for w in cut.warnings)
    assert "at least" in cut.answer()
    assert any("terminal flow" in t for t in cut.cannot_say())


def test_crossover(whole):
    """Derived: where the exact moduli cross."""
    omega, modulus = MELT.crossover()
    assert whole.bands["omega_rad_per_s"].value == pytest.approx(omega, rel=0.05)
    assert whole.bands["G_Pa"].value == pytest.approx(modulus, rel=0.05)


def test_contract(whole):
    """Contract of `spectrum`: keys, plain numbers with bands beside, tables and units."""
    record = json.loads(json.dumps(whole.to_dict(), allow_nan=False))
    assert set(record["terminal"]) == {"eta0_Pa_s", "Je0_per_Pa", "mean_time_s"}
    assert isinstance(record["terminal"]["eta0_Pa_s"], float)
    assert record["bands"]["terminal"]["eta0_Pa_s"]["status"] == "resolved"
    assert record["supported"]["tau_low_s"] < record["supported"]["tau_high_s"]
    assert record["consistency"]["kramers_kronig"]["passed"] is True
    assert 0.3 < record["consistency"]["kramers_kronig"]["chi2_per_point"] < 2.0
    tables = whole.tables()
    assert {"spectrum.csv", "continuous.csv", "fit.csv"} <= set(tables)
    assert list(tables["spectrum.csv"].columns) == ["tau [s]", "g [Pa]"]
    assert {"H [Pa]", "H low [Pa]", "H high [Pa]"} <= set(tables["continuous.csv"].columns)
    assert not tables["fit.csv"].isna().any().any()


def test_same_seed_same_bytes():
    """House rule: results are determined by input and seed."""
    one, two = (fit_spectrum(sweep(-1, 2), members=20, seed=4).to_dict() for _ in range(2))
    assert json.dumps(one) == json.dumps(two)
    other = fit_spectrum(sweep(-1, 2), members=20, seed=5)
    assert other.bands["eta0_Pa_s"].high != one["bands"]["terminal"]["eta0_Pa_s"]["high"]


def test_no_members_no_intervals():
    """Contract: `--members 0` gives no intervals."""
    fit = fit_spectrum(sweep(-2, 2), members=0)
    assert fit.bands["eta0_Pa_s"].low is None
    assert fit.continuous.members.shape[0] == 0
    json.dumps(fit.to_dict(), allow_nan=False)


def test_single_maxwell_mode():
    """Common practice: one Maxwell mode is one mode; eta0 = g tau within the interval."""
    omega = np.logspace(-2, 2, 21)
    fit = fit_spectrum(Sweep(omega, *Spectrum([1.0], [1000.0]).moduli(omega)), members=40)
    assert fit.discrete.tau.size == 1
    assert fit.discrete.tau[0] == pytest.approx(1.0, rel=1e-6)
    eta0 = fit.bands["eta0_Pa_s"]
    assert eta0.low <= 1000.0 * (1 + 1e-9) and eta0.high >= 1000.0 * (1 - 1e-9)
    assert eta0.value == pytest.approx(1000.0, rel=0.02)


def test_fixed_modes_and_noise():
    """House rule: what the user states is used."""
    fit = fit_spectrum(sweep(-2, 2), members=0, modes=4, noise=0.05)
    assert fit.discrete.tau.size == 4
    assert fit.weights.source == "given"
    assert fit.to_dict()["noise"]["relative"]["value"] == 0.05


def test_too_small_a_noise_is_said():
    """House rule: chi2 far from one is explained in words."""
    fit = fit_spectrum(sweep(-2, 2, noise=0.05), members=0, noise=0.01)
    texts = {w.code: w.text for w in fit.warnings}
    assert "times the noise that was given" in texts["misfit_unlike_noise"]
    assert not fit.kramers_kronig.passed


def test_narrow_window():
    """Recalled (Davies & Anderssen 1997): under 1.36 decades nothing is supported; that is said."""
    fit = fit_spectrum(sweep(0, 1, per_decade=10), members=0)
    assert any(w.code == "window_too_narrow" for w in fit.warnings)
    with pytest.raises(InputError, match="too few"):
        fit_spectrum(sweep(-1, 2).select(np.arange(16) < 3))


def script(name: str) -> ModuleType:
    """A study beside the tests, as a module."""
    path = Path(__file__).with_name(f"{name}.py")
    spec = importlib.util.spec_from_file_location(f"mwdlink_{name}", path)
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


@pytest.mark.parametrize(
    ("melt", "kernel", "decades", "distance"),
    [
        ("two parts, 3e4 and 2e5", "power-law", 2, 0.05),
        ("narrow, dispersity 1.1", "power-law", 2, 0.05),
        ("two narrow, 5e4 and 2e5", "power-law", 2, 0.05),
        ("two narrow, 5e4 and 2e5", "exponential", 2, 0.05),
        # two sharp peaks in six decades: what repeats better leans more [measured: 12 %]
        ("two narrow, 5e4 and 2e5", "exponential", 3, 0.13),
    ],
)
def test_repeats_over_noise_seeds(
    melt: str, kernel: str, decades: int, distance: float, full: bool
):
    """Published practice is 10 % (Stadler & Bailly 2009); held here to 5 % at 3 % noise.

    The spectrum must not lean for it: the mean stays near the exact one. The whole table is in
    docs/spectrum.md; here 40 sweeps (100 with --full).
    """
    module = script("reproducibility")
    found = module.spread(
        module.melts()[melt],
        decades=(-decades, decades),
        sweeps=100 if full else 40,
        kernel=kernel,
    )
    assert found["largest"] < 0.05
    assert found["bias"] < distance


def test_shares_of_smoothing_weights():
    """Derived: evidence alone where all repeat; those that do not have no say; and where none does,
    the best of the believable ones, not the smoothest of all, has it."""
    evidence = np.array([-30.0, -1.0, 0.0, -1.0])
    plain = np.exp(evidence) / np.exp(evidence).sum()
    np.testing.assert_allclose(
        shares_that_repeat(evidence, np.full(4, 0.02)), plain, rtol=1e-3, atol=1e-12
    )
    np.testing.assert_allclose(shares_that_repeat(evidence, np.zeros(4)), plain, rtol=1e-9)
    tilted = shares_that_repeat(evidence, np.array([0.01, 0.03, 0.06, 0.09]))
    assert tilted[1] > 0.99
    noisy = shares_that_repeat(evidence, np.array([0.1, 0.2, 0.3, 0.4]))
    assert noisy[1] > 0.99 and noisy[0] < 1e-6
    assert noisy.sum() == pytest.approx(1.0)


def test_intervals_hold_the_truth(full: bool):
    """Derived: a 90 % interval of eta0 holds it in 85 to 97 of 100 sweeps, the band likewise.

    With twelve sweeps (no --full) chance alone allows less: asked is nine of them.
    """
    module = script("cover_of_spectrum")
    melt = module.melts()["narrow, dispersity 1.1"]
    found = module.cover(melt, sweeps=100 if full else 12, members=60)
    if full:
        assert 0.85 <= found["eta0_Pa_s"] <= 0.97
        assert 0.85 <= found["band"]
    else:
        assert found["eta0_Pa_s"] >= 0.75 and found["band"] >= 0.75


def test_many_readings():
    """Derived: averaging dense readings before the fit changes nothing but the time it takes."""
    dense = fit_spectrum(sweep(-2, 2, per_decade=100), members=20)
    assert dense.discrete.points == 802 and len(dense.to_frame()) == dense.continuous.tau.size
    assert len(dense.tables()["fit.csv"]) == 401
    assert 0.8 < dense.discrete.chi2_per_point < 1.2
    true = log_normal(dense.continuous.tau)
    seen = dense.supported_mask & (true > 0.01 * true.max())
    np.testing.assert_allclose(dense.continuous.H[seen], true[seen], rtol=0.05)
    assert not any(w.code == "misfit_unlike_noise" for w in dense.warnings)


def test_scatter_is_foretold_and_said():
    """Derived: over noise seeds ln H moves as the column says; where it is above 5 % that is said
    (10 % is published practice: Stadler & Bailly 2009)."""
    fits = [fit_spectrum(sweep(-2, 2, seed=s), members=0, noise=0.03) for s in range(16)]
    counted = np.all([f.continuous.counted for f in fits], axis=0)
    found = np.std([np.log(f.continuous.H) for f in fits], axis=0, ddof=1)[counted]
    told = np.mean([f.continuous.scatter for f in fits], axis=0)[counted]
    # 16 seeds know a standard deviation to 18 % at each node; nodes beside each other go together
    assert 0.6 < np.sqrt(np.mean(found**2) / np.mean(told**2)) < 1.6
    table = fits[0].tables()["continuous.csv"]
    np.testing.assert_array_equal(table["scatter [-]"], fits[0].continuous.scatter)
    assert all("spectrum_scatters" not in {c.code for c in f.warnings} for f in fits)

    module = script("reproducibility")
    omega = np.logspace(-2, 2, 21)
    response = module.Relaxation(
        module.melts()["narrow, dispersity 1.1"],
        module.builtin("hdpe").melt(190.0),
        module.Model("exponential"),
    )
    storage, loss = response.moduli(omega)
    said = []
    for seed in range(8):
        noise = np.exp(0.03 * np.random.default_rng([seed, 7]).standard_normal((2, omega.size)))
        bad = fit_spectrum(Sweep(omega, storage * noise[0], loss * noise[1]), members=0, noise=0.03)
        said += [c.text for c in bad.warnings if c.code == "spectrum_scatters"]
    # 17 of 24 measured (docs/spectrum.md)
    assert len(said) >= 3 and "times as many points per decade" in said[0]
