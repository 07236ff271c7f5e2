"""GPC and sweep as one inference: on invented melts with a known tail, or none."""

from __future__ import annotations

import importlib.util
import json
from dataclasses import replace
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest

from mwdlink.chains.distribution import Distribution
from mwdlink.chains.polymer import builtin
from mwdlink.decisions.gpc_scale import STANDARD_A, STANDARD_K, on_own_scale
from mwdlink.decisions.tail import find_tail
from mwdlink.decisions.tail_interval import uncertain
from mwdlink.decisions.tail_limit import _crossing, copy_with, low_ends
from mwdlink.decisions.tail_result import Tail
from mwdlink.decisions.tail_words import percent
from mwdlink.errors import InputError
from mwdlink.inversion import joint, joint_fit
from mwdlink.inversion.joint_ensemble import infer, settle, weight_beyond
from mwdlink.inversion.joint_explain import LEAST_BRANCHING, NAMES
from mwdlink.measurement.sweep import Sweep
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model


def _load(name: str) -> ModuleType:
    path = Path(__file__).parents[1] / "benchmarks" / f"{name}.py"
    spec = importlib.util.spec_from_file_location(name, path)
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


STUDY = _load("tail_study")
POWER = _load("tail_power")
BEYOND = STUDY.EXCLUSION
QUICK = {"beyond": BEYOND, "noise": 0.03, "members": 40, "kernels": ("power-law",)}


@pytest.fixture(scope="module")
def with_tail() -> tuple[Distribution, Tail]:
    true, gpc, sweep, _ = STUDY.made(1, tail=0.02)
    return true, find_tail(gpc, sweep, "hdpe", **QUICK)


@pytest.fixture(scope="module")
def without() -> tuple[Distribution, Tail]:
    true, gpc, sweep, _ = STUDY.made(2, tail=0.0)
    return true, find_tail(gpc, sweep, "hdpe", **QUICK)


def _problem(kernel: str = "power-law") -> tuple[joint.JointProblem, np.ndarray]:
    _, gpc, sweep, _ = STUDY.made(3, tail=0.02)
    setting = settle(
        gpc,
        sweep.omega,
        sweep.storage,
        sweep.loss,
        np.full(2 * len(sweep), 0.03),
        builtin("hdpe").melt(190.0),
        (kernel,),
    )
    problem, _ = setting.problem(kernel)
    u = -0.5 * ((setting.x - 5.0) / 0.5) ** 2
    z = joint_fit.start(problem, u - np.log(np.exp(u).sum()))
    z[problem.n + 1 :] += [0.1, 0.13, 0.02, 0.01, 0.001]
    return problem, z


@pytest.mark.parametrize("kind", [None, "slow", "plateau"])
def test_slopes_are_exact(kind: str | None) -> None:
    """Every derivative of the joint residuals against central differences (derived)."""
    problem, z = _problem()
    if kind is not None:
        size = np.array([2.0, 5.0]) if kind == "slow" else np.array([2.0])
        extra = joint.Extra(kind, size, np.ones_like(size))
        problem = problem.with_priors(problem.priors, extra)
        z = np.concatenate([z, size])
    _, slope, _ = problem.residuals(z)
    for i in [0, 20, 40, *range(problem.n, problem.size)]:
        step = np.zeros(problem.size)
        step[i] = 1e-5
        up, down = problem.residuals(z + step)[0], problem.residuals(z - step)[0]
        measured = (up - down) / 2e-5
        assert np.abs(measured - slope[:, i]).max() < 1e-5 * max(1.0, np.abs(measured).max())


@pytest.mark.parametrize("exponent", [1.7, 2.0, 2.3])
def test_moduli_are_the_predictions(exponent: float) -> None:
    """The fit's interpolated moduli against the prediction of the same melt (derived)."""
    problem, z = _problem("reptation")
    w = joint.weights(z[: problem.n + 1])[:-1]
    melt = Distribution.from_nodes(10.0**problem.x, w)
    law = builtin("hdpe").melt(190.0).with_(time_factor=float(np.exp(0.1)))
    omega = np.exp(problem.response.log_omega)
    wanted = np.concatenate(Relaxation(melt, law, Model("reptation", exponent)).moduli(omega))
    got = problem.response.log_moduli(np.append(w / w.sum(), 1e-15), 0.1, exponent)[0]
    assert np.abs(np.exp(got) / wanted - 1).max() < 2e-3


def test_tail_is_found(with_tail: tuple[Distribution, Tail]) -> None:
    """2 wt% of an invented tail: within 0.5 wt%, inside the interval's reach, and named."""
    true, r = with_tail
    value = true.weight_above(BEYOND)
    assert abs(r.fraction.value - value) < 0.005
    assert r.found and r.excess.low > 0
    assert r.excess.value < r.fraction.value
    assert r.explanations[0].name == "tail"
    assert "A tail the GPC does not show" in r.answer()
    assert any("One temperature" in line for line in r.advice)


def test_no_tail_no_excess(without: tuple[Distribution, Tail]) -> None:
    """A tail-free melt: nothing found, an upper limit stated, its own detection limit given."""
    true, r = without
    assert not r.found
    assert r.fraction.low - 1e-3 <= true.weight_above(BEYOND) <= r.fraction.high + 1e-3
    assert "No tail found: less than" in r.answer()
    assert 0 < r.detection_limit < 0.02


def test_time_law_is_recovered(with_tail: tuple[Distribution, Tail]) -> None:
    """The law was off by a factor the fit is not told: it lies in the interval (derived)."""
    factor = STUDY.made(1, tail=0.02)[3]
    _, r = with_tail
    assert r.time_law_factor.low * 0.95 < factor < r.time_law_factor.high * 1.05


def test_explanations(with_tail: tuple[Distribution, Tail], without: object) -> None:
    """All seven are weighed, shares add up, and branching is never ruled out (physics)."""
    for _, r in (with_tail, without):  # type: ignore[misc]
        assert {e.name for e in r.explanations} == set(NAMES)
        assert sum(e.support for e in r.explanations) == pytest.approx(1.0)
        support = {e.name: e.support for e in r.explanations}
        assert support["branching"] >= LEAST_BRANCHING - 1e-9
        assert "branching" in " ".join(r.cannot_say())
    _, r = without  # type: ignore[misc]
    assert {e.name: e.support for e in r.explanations}["tail"] < 0.5


def test_law_off_is_no_tail() -> None:
    """A law off by 40 % without a tail must be taken for what it is."""
    true, gpc, sweep, _ = STUDY.made(6, tail=0.0)
    shifted = replace(sweep, omega=sweep.omega / 1.4)
    r = find_tail(gpc, shifted, "hdpe", **QUICK)
    assert not r.found
    assert r.time_law_factor.value > 1.2
    support = {e.name: e.support for e in r.explanations}
    assert support["time law"] > support["none"]
    assert abs(r.fraction.value - true.weight_above(BEYOND)) < 0.005


def test_deterministic_and_plain(with_tail: tuple[Distribution, Tail]) -> None:
    """Same seed, same result; JSON has no NaN; tables carry units (the written contract)."""
    _, gpc, sweep, _ = STUDY.made(1, tail=0.02)
    again = find_tail(gpc, sweep, "hdpe", **QUICK)
    _, r = with_tail
    assert json.dumps(r.to_dict(), allow_nan=False) == json.dumps(again.to_dict())
    assert set(r.payload()["tail"]) >= {"M_g_per_mol", "fraction", "excess", "detection_limit"}
    assert set(r.tables()) == {"distribution.csv", "gpc_only.csv", "fit.csv"}
    assert list(r.to_frame().columns)[:2] == ["M [g/mol]", "dW/dlog10M"]
    assert r.fraction.budget and sum(r.fraction.budget.values()) == pytest.approx(1.0)


def test_default_limit_is_the_last_supported_mass() -> None:
    """Without `beyond` the tail begins where the GPC's table ends (the written contract)."""
    _, gpc, sweep, _ = STUDY.made(1, tail=0.02)
    r = find_tail(gpc, sweep, "hdpe", noise=0.03, members=0, kernels=("power-law",))
    assert r.beyond == pytest.approx(BEYOND, rel=0.02)
    assert r.fraction.low is None
    narrowed = find_tail(
        gpc, sweep, "hdpe", noise=0.03, members=0, kernels=("power-law",), trust_range=(2e3, 7e5)
    )
    assert narrowed.gpc_range[1] <= 7e5 and narrowed.beyond <= 7e5


def test_limit_falls_with_better_data() -> None:
    """The detection limit is the data's own: a third of the noise finds smaller tails."""
    _, gpc, sweep, _ = STUDY.made(2, tail=0.0)
    quick = {"beyond": BEYOND, "members": 0, "kernels": ("power-law",)}
    coarse = find_tail(gpc, sweep, "hdpe", noise=0.06, **quick)
    fine = find_tail(gpc, sweep, "hdpe", noise=0.02, **quick)
    assert fine.detection_limit < coarse.detection_limit


def test_equivalent_masses_are_converted() -> None:
    """Equal hydrodynamic volume K M^(1+a) on both scales (Mark-Houwink; constants recalled)."""
    card = builtin("hdpe")
    d = Distribution.from_nodes([1e4, 1e5, 1e6], [0.2, 0.6, 0.2], calibration="equivalent")
    own, cautions = on_own_scale(d, card)
    k, a = card.get("mark_houwink.K_dL_per_g"), card.get("mark_houwink.a")
    left = STANDARD_K * d.molar_mass ** (1 + STANDARD_A)
    assert np.allclose(left, k * own.molar_mass ** (1 + a), rtol=1e-12)
    assert 1.8 < d.molar_mass[1] / own.molar_mass[1] < 2.6
    assert cautions[0].code == "gpc_scale_converted"
    plain = replace(d, calibration="unstated")
    assert on_own_scale(plain, card)[1][0].code == "gpc_scale_unknown"


def test_weight_beyond_counts_part_of_a_cell() -> None:
    """Half a cell is half its weight; the lump counts whole (derived)."""
    x = np.array([4.0, 5.0, 6.0])
    assert weight_beyond(x, np.array([0.2, 0.5, 0.3]), 1e5) == pytest.approx(0.25 + 0.3)
    assert weight_beyond(x, np.array([0.2, 0.4, 0.3, 0.1]), 1e8) == pytest.approx(0.1)


def test_what_cannot_be_used_is_refused() -> None:
    """Errors name what is wrong."""
    _, gpc, sweep, _ = STUDY.made(1, tail=0.02)
    short = Sweep(sweep.omega[:3], sweep.storage[:3], sweep.loss[:3])
    with pytest.raises(InputError, match="3 points"):
        find_tail(gpc, short, "hdpe")
    with pytest.raises(InputError, match="rows of the GPC"):
        find_tail(gpc, sweep, "hdpe", noise=0.03, trust_range=(1e3, 1.01e3))
    with pytest.raises(InputError, match="positive"):
        find_tail(gpc, sweep, "hdpe", beyond=-1.0)


@pytest.mark.parametrize(("kernel", "seed"), [("exponential", 9), ("reptation", 4)])
def test_wrong_kernel_alone_is_known_to_be_wrong(kernel: str, seed: int) -> None:
    """A power-law melt read with another kernel alone: far off, and the result says how far."""
    true, gpc, sweep, _ = STUDY.made(seed, kinds=STUDY.BODIES)
    r = find_tail(gpc, sweep, "hdpe", **(QUICK | {"kernels": (kernel,)}))
    value = true.weight_above(BEYOND)
    assert abs(r.fraction.value - value) > 0.005
    assert r.fraction.low <= value <= r.fraction.high
    assert r.fraction.status == "assumed" and "Assumed, not measured" in r.answer()
    assert "kernel_doubted" in {w.code for w in r.warnings}
    assert r.fraction.budget["kernel"] > 0.5
    asked = {k["kernel"]: k["asked"] for k in r.kernels}
    assert asked[kernel] and not asked["power-law"]
    assert r.model["kernels"] == [kernel]


def test_right_kernel_alone_is_not_disturbed(with_tail: tuple[Distribution, Tail]) -> None:
    """Kernels that the data speak against leave the interval as it is (derived)."""
    _, r = with_tail
    assert r.fraction.status == "resolved"
    assert "kernel_doubted" not in {w.code for w in r.warnings}
    assert [k["kernel"] for k in r.kernels if k["asked"]] == ["power-law"]
    assert not any(k["admissible"] for k in r.kernels if not k["asked"])


def test_interval_reaches_as_far_as_all_kernels() -> None:
    """By hand: the hull of the own interval and of the weighted mixture; the rest is kernel."""
    own = np.linspace(1.0, 2.0, 101)
    other = np.linspace(3.0, 4.0, 51)
    plain = uncertain(own, 0.9, budget={"noise": 1.0})
    assert (plain.low, plain.high) == pytest.approx((1.05, 1.95), abs=0.01)
    wide = uncertain(own, 0.9, other=other, doubt=1.0, budget={"noise": 1.0})
    assert wide.value == pytest.approx(1.5)
    assert (wide.low, wide.high) == pytest.approx((1.05, 3.95), abs=0.01)
    assert wide.budget["noise"] == pytest.approx((0.9 / 2.9) ** 2, rel=0.02)
    assert sum(wide.budget.values()) == pytest.approx(1.0)
    slight = uncertain(own, 0.9, other=other, doubt=0.02)
    assert slight.high < 2.0


def test_detection_limit_has_the_power_it_claims() -> None:
    """Eight pairs with a tail of exactly the limit: nearly all found; of half of it, few."""
    r = POWER.power(8, 0.03, 1e-2, members=30, first=100)
    assert r["none"] <= 1
    at, half = r["found"]
    assert at >= 0.75 and half <= 0.5
    # what a "no tail found" rules out is not below what it may have missed
    assert r["held"] == r["missed"]


def test_crossing_by_hand() -> None:
    """The zero of a line, near the smallest and largest weights too; none where there is none."""
    for zero in (2e-5, 3e-4, 2e-3, 0.03):
        assert _crossing(lambda f, zero=zero: f - zero) == pytest.approx(zero, rel=1e-6)
        assert _crossing(lambda f, zero=zero: np.log(f / zero)) == pytest.approx(zero, rel=2e-3)
    assert _crossing(lambda f: -1.0) is None
    assert _crossing(lambda f: 1.0) < 2e-5


def test_copies_give_back_their_tail() -> None:
    """The copy without noise gives back the tail that was put in, and larger ones show more."""
    _, gpc, sweep, _ = STUDY.made(2, tail=0.0)
    sigma = np.full(2 * len(sweep), 0.03)
    melt = builtin("hdpe").melt(190.0)
    setting = settle(gpc, sweep.omega, sweep.storage, sweep.loss, sigma, melt, ("power-law",))
    found = infer(setting, ("power-law",), 0, 0)
    x = setting.x
    shape = np.exp(-0.5 * ((x - np.log10(2.4e6)) / 0.2) ** 2)
    shape /= shape.sum()
    median = []
    for size in (0.005, 0.01, 0.02):
        copy = copy_with(found.kernels[0], found.alone, shape, size)
        wanted = weight_beyond(x, (1 - size) * found.alone.w + size * shape, BEYOND)
        assert weight_beyond(x, copy.free.best.w, BEYOND) == pytest.approx(wanted, rel=0.1)
        median.append(np.median(low_ends(copy, BEYOND, 0.9)))
    assert median[0] < median[1] < median[2]


def test_what_is_ruled_out_covers_what_would_be_missed(
    without: tuple[Distribution, Tail],
) -> None:
    """Continuation and detection limit, where that is more than the interval's end (derived)."""
    _, r = without
    continued = r.fraction.value - r.excess.value
    assert r.at_most == pytest.approx(max(r.fraction.high, continued + r.detection_limit))
    assert f"less than {percent(r.at_most)} wt%" in r.answer()
    assert r.payload()["tail"]["at_most"] == r.at_most
    unlimited = replace(r, detection_limit=None)
    assert unlimited.at_most == r.fraction.high and "reliably" in unlimited.answer()


@pytest.mark.full
def test_power_of_the_limit_over_many() -> None:
    """Claimed is nine in ten: 0.9 less two of its standard deviations over 40 pairs each."""
    for noise, low in POWER.SETTINGS:
        at, half = POWER.power(40, noise, low, 40, first=400)["found"]
        assert at >= 0.8 and half <= 0.5, (noise, low)


@pytest.mark.full
@pytest.mark.parametrize("kernel", ["exponential", "reptation"])
def test_wrong_kernel_over_many(kernel: str) -> None:
    """Power-law melts read with another kernel alone: 90 % intervals still hold the truth."""
    s = STUDY.study(40, (kernel,), 60, kinds=STUDY.BODIES)
    assert s["cover"] >= 0.8


@pytest.mark.full
def test_targets_over_many() -> None:
    """The figures of docs/tail.md: errors, cover of 90 % intervals, false findings."""
    s = STUDY.study(200, ("power-law",), 100, kinds=STUDY.BODIES)
    assert s["median error"] <= 0.2
    assert 0.85 <= s["cover"] <= 0.97
    free = STUDY.study(50, ("power-law",), 100, kinds=STUDY.BODIES, tail=0.0)
    assert free["found"] <= 3


@pytest.mark.full
@pytest.mark.xfail(strict=True, reason="0.55: what the sweep says of the exponent (docs/tail.md)")
def test_worst_error_with_the_exponent_unknown() -> None:
    """Asked for: 0.5 wt% at worst over 200 cases, the exponent within 0.2 beforehand."""
    s = STUDY.study(200, ("power-law",), 100, kinds=STUDY.BODIES)
    assert s["worst error"] <= 0.5


@pytest.mark.full
def test_worst_error_with_the_exponent_known_better() -> None:
    """The same with the exponent within 0.05, as blends of known fractions give it."""
    s = STUDY.study(200, ("power-law",), 40, kinds=STUDY.BODIES, asked=(1.92, 2.08))
    assert s["worst error"] <= 0.5


@pytest.mark.full
@pytest.mark.parametrize("kernel", ["exponential", "reptation"])
def test_other_kernels_are_told_apart(kernel: str) -> None:
    """Melts made with another kernel, all kernels fitted: the interval still holds the truth."""
    s = STUDY.study(20, None, 60, kernel=kernel)
    assert s["median error"] <= 0.3
    assert s["cover"] >= 0.75
