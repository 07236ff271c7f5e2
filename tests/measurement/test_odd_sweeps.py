"""Sweeps no melt has: an answer without NaN, or one of the project's own errors."""

from __future__ import annotations

import json

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from mwdlink.errors import MwdlinkError
from mwdlink.measurement.consistency import check_consistency
from mwdlink.measurement.master import make_master
from mwdlink.measurement.spectrum_fit import fit_spectrum
from mwdlink.measurement.sweep import Sweep
from mwdlink.relaxation.spectrum import Spectrum


def odd_sweep(seed: int, temperature: float = 190.0) -> Sweep:
    """Random scatter, power laws of any slope, constants, or a few modes with up to 30 % noise."""
    rng = np.random.default_rng(seed)
    n = int(rng.choice([3, 4, 5, 8, 12, 25]))
    start = rng.uniform(-6, 3)
    omega = np.logspace(start, start + rng.uniform(0.3, 8), n)
    scale = 10 ** rng.uniform(-3, 9)
    kind = rng.integers(4)
    if kind == 0:
        storage, loss = scale * np.exp(rng.standard_normal((2, n)) * rng.uniform(0, 2))
    elif kind == 1:
        storage = scale * omega ** rng.uniform(-0.5, 2.5)
        loss = scale * omega ** rng.uniform(-0.5, 1.5)
    elif kind == 2:
        storage, loss = np.full(n, scale), np.full(n, scale * 10 ** rng.uniform(-4, 4))
    else:
        k = int(rng.integers(1, 8))
        tau = np.sort(10 ** rng.uniform(-start - 6, -start + 2, k))
        moduli = Spectrum(tau, scale * 10 ** rng.uniform(-3, 3, k)).moduli(omega)
        noise = np.exp(rng.uniform(0, 0.3) * rng.standard_normal((2, n)))
        storage, loss = moduli[0] * noise[0] + 1e-30, moduli[1] * noise[1] + 1e-30
    return Sweep(omega, storage, loss, temperature_C=temperature)


def speak(result) -> None:
    """Everything a user or a program may ask of a result."""
    json.dumps(result.to_dict(), allow_nan=False)
    assert result.answer() and result.paragraph()
    assert isinstance(result.cannot_say(), tuple)
    assert all(len(table) for table in result.tables().values())


@settings(max_examples=15, deadline=None, derandomize=True)
@given(st.integers(0, 10**6))
def test_any_sweep(seed):
    """House rule: never a traceback, never a NaN, intervals around their values."""
    sweep = odd_sweep(seed)
    for look in (check_consistency, lambda s: fit_spectrum(s, members=5)):
        try:
            result = look(sweep)
        except MwdlinkError:
            continue
        speak(result)
        for q in getattr(result, "bands", {}).values():
            assert q.low is None or q.low <= q.value <= q.high


@settings(max_examples=8, deadline=None, derandomize=True)
@given(st.integers(0, 10**6), st.booleans(), st.sampled_from(["none", "rho-T", "free"]))
def test_any_set_of_temperatures(seed, related, vertical):
    """The same for master curves, of sweeps that belong together (one shifted) or do not."""
    rng = np.random.default_rng(seed)
    count = int(rng.integers(1, 5))
    temperatures = np.cumsum(rng.uniform(0.5, 40, count)) + 120
    sweeps = []
    for k, t in enumerate(temperatures):
        one = odd_sweep(seed if related else seed + k, float(t))
        factor = 10 ** (0.02 * (temperatures[0] - t)) if related else 1.0
        sweeps.append(one.with_(omega=one.omega / factor))
    try:
        made = make_master(sweeps, 150.0, vertical=vertical, members=10)
    except MwdlinkError:
        return
    json.dumps(made.to_dict(), allow_nan=False)
    assert made.answer() and made.paragraph()
    made.master_sweep()
