"""Sheets whose numbers hang together, and sheets with one that does not: all invented."""

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
from mwdlink.decisions.datasheet import check_datasheet
from mwdlink.decisions.datasheet_claims import Claim, Sheet
from mwdlink.decisions.datasheet_families import FAMILIES, MASS, distribution_rows
from mwdlink.decisions.datasheet_model import CARD, ENTRANCE_PRIOR, sheet_model
from mwdlink.errors import InputError
from mwdlink.files.sheet import read_sheet
from mwdlink.relaxation.flow import melt_flow_rate
from mwdlink.relaxation.melt_response import Relaxation
from mwdlink.relaxation.mixing import Model


def _load(name: str) -> ModuleType:
    path = Path(__file__).parents[1] / "benchmarks" / f"{name}.py"
    spec = importlib.util.spec_from_file_location(name, path)
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


STUDY = _load("sheet_study")
HDPE = builtin("hdpe")
USUAL = (
    "Mn_g_per_mol", "Mw_g_per_mol", "Mz_g_per_mol", "eta0_Pa_s", "melt_flow 2.16 kg 190 C",
    "melt_flow 21.6 kg 190 C", "crossover_omega_rad_per_s", "crossover_G_Pa",
    "viscosity 0.1 rad/s 190 C", "intrinsic_viscosity", "activation_energy",
)  # fmt: skip


def _sheet(**changed: float) -> Sheet:
    """An invented linear HDPE of log-normal distribution, claims right; some times a factor."""
    z = np.zeros((1, 9))
    y = np.exp(sheet_model(HDPE, STUDY.POSSIBLE, "power-law").predict(z, "log-normal")[0])
    names = [c.quantity for c in STUDY.POSSIBLE]
    claims = [
        replace(c, value=float(v) * changed.get(n, 1.0))
        for c, n, v in zip(STUDY.POSSIBLE, names, y, strict=True)
        if n in USUAL
    ]
    return Sheet(tuple(claims), HDPE)


def test_numbers_are_the_predictions() -> None:
    """Every quantity against `Relaxation` and the flow integral of the same melt (derived)."""
    z = np.zeros((1, 9))
    z[0, 0] = 0.3
    w = distribution_rows(z[:, :2], "log-normal")[0]
    d = Distribution.from_nodes(MASS, w)
    melt = HDPE.melt(190.0)
    r = Relaxation(d, melt, Model("power-law", 2.0))
    got = dict(
        zip(
            [c.quantity for c in STUDY.POSSIBLE],
            np.exp(sheet_model(HDPE, STUDY.POSSIBLE, "power-law").predict(z, "log-normal")[0]),
            strict=True,
        )
    )
    assert got["Mn_g_per_mol"] == pytest.approx(d.Mn, rel=1e-6)
    assert got["Mz_g_per_mol"] == pytest.approx(d.Mz, rel=1e-6)
    assert got["eta0_Pa_s"] == pytest.approx(r.zero_shear_viscosity, rel=2e-3)
    omega, level = r.crossover()
    assert got["crossover_omega_rad_per_s"] == pytest.approx(omega, rel=5e-3)
    assert got["crossover_G_Pa"] == pytest.approx(level, rel=5e-3)
    spectrum = r.spectrum()
    for load in (2.16, 21.6):
        wanted = melt_flow_rate(spectrum, load, HDPE.density(190.0), ENTRANCE_PRIOR[0])
        assert got[f"melt_flow {load:g} kg 190 C"] == pytest.approx(wanted, rel=0.01)
    k, a = HDPE.get("mark_houwink.K_dL_per_g"), HDPE.get("mark_houwink.a")
    assert got["intrinsic_viscosity"] == pytest.approx(k * d.moment(a), rel=1e-6)
    assert got["activation_energy"] == pytest.approx(26.8, rel=1e-6)


@pytest.mark.parametrize("family", FAMILIES)
def test_families_have_the_average_asked_for(family: str) -> None:
    """The first unknown is ln of the weight average in every family (derived)."""
    rng = np.random.default_rng(1)
    z = rng.standard_normal((6, len(FAMILIES[family])))
    w = distribution_rows(z, family)
    assert np.allclose(w.sum(axis=1), 1.0)
    assert np.allclose(np.log(w @ MASS), np.log(1.3e5) + z[:, 0], atol=5e-3)


@pytest.mark.parametrize("family", FAMILIES)
def test_slopes(family: str) -> None:
    """Derivatives against central differences (derived)."""
    model = sheet_model(HDPE, STUDY.POSSIBLE, "exponential")
    d = len(FAMILIES[family]) + len(CARD)
    z = 0.3 * np.random.default_rng(2).standard_normal((2, d))
    _, slope = model.predict_and_slope(z, family, len(STUDY.POSSIBLE))
    for i in range(d):
        step = np.zeros(d)
        step[i] = 1e-2
        up, down = model.predict(z + step, family), model.predict(z - step, family)
        assert np.allclose((up - down) / 2e-2, slope[:, :, i], atol=0.02)


@pytest.fixture(scope="module")
def clean() -> object:
    return check_datasheet(_sheet())


def test_clean_sheet_passes(clean: object) -> None:
    """Claims of one melt: nothing stands out, and the verdict says so."""
    r = clean
    assert r.odd_one_out is None  # type: ignore[attr-defined]
    assert "hangs together" in r.answer()  # type: ignore[attr-defined]
    assert all(j.verdict in ("consistent", "cannot judge") for j in r.claims)  # type: ignore[attr-defined]
    json.dumps(r.to_dict(), allow_nan=False)  # type: ignore[attr-defined]


def test_what_others_do_not_determine() -> None:
    """Mn from rheology alone is not determined: `cannot judge` is the right answer (physics)."""
    claims = [c for c in _sheet().claims if c.kind in ("Mn", "eta0", "activation energy")]
    r = check_datasheet(Sheet(tuple(claims), HDPE))
    verdicts = {j.quantity: j.verdict for j in r.claims}
    assert verdicts["Mn_g_per_mol"] == "cannot judge"
    assert "nothing can be said" in r.answer() or r.odd_one_out is None


@pytest.mark.parametrize(
    ("name", "factor"),
    [
        ("eta0_Pa_s", 2.0),
        ("melt_flow 2.16 kg 190 C", 1.6),
        ("Mw_g_per_mol", 0.6),
        ("viscosity 0.1 rad/s 190 C", 0.6),
    ],
)
def test_claim_off_is_named(name: str, factor: float) -> None:
    """One claim moved well beyond its tolerance is the odd one out."""
    r = check_datasheet(_sheet(**{name: factor}))
    assert r.odd_one_out == name
    verdicts = {j.quantity: j.verdict for j in r.claims}
    assert verdicts.pop(name) == "inconsistent"
    assert "inconsistent" not in verdicts.values()


M2, M21, V01 = "melt_flow 2.16 kg 190 C", "melt_flow 21.6 kg 190 C", "viscosity 0.1 rad/s 190 C"


def _only(sheet: Sheet, *names: str) -> Sheet:
    return replace(sheet, claims=tuple(c for c in sheet.claims if c.quantity in names))


@pytest.mark.parametrize(
    ("name", "factor"),
    [("eta0_Pa_s", 1000.0), ("Mw_g_per_mol", 0.01), ("Mz_g_per_mol", 0.1), (M2, 10.0),
     (M21, 0.1), ("intrinsic_viscosity", 3.0), ("activation_energy", 2.0),
     ("crossover_omega_rad_per_s", 10.0), ("crossover_G_Pa", 5.0), (V01, 0.01)],
)  # fmt: skip
def test_one_claim_badly_off_does_not_taint_the_others(name: str, factor: float) -> None:
    """Judged by the rest without it, all others are consistent, and only it is named."""
    r = check_datasheet(_sheet(**{name: factor}))
    assert (r.odd_one_out, r.also_off, r.rivals) == (name, (), ())
    verdicts = {j.quantity: j.verdict for j in r.claims}
    assert verdicts.pop(name) == "inconsistent"
    assert set(verdicts.values()) == {"consistent"}
    assert "One claim does not fit" in r.verdict and "The rest hangs together" in r.verdict
    # and what it should be is what the clean sheet says
    clean_value = next(c.value for c in _sheet().claims if c.quantity == name)
    one = next(j for j in r.claims if j.quantity == name)
    assert one.expected.value == pytest.approx(clean_value, rel=0.1)


@pytest.mark.parametrize(
    ("names", "changed"),
    [(("Mw_g_per_mol", "eta0_Pa_s", V01), {V01: 0.35}),
     (("Mw_g_per_mol", M2, V01, "activation_energy"), {V01: 2.5})],
)  # fmt: skip
def test_two_that_could_each_be_off_are_both_named(
    names: tuple[str, ...], changed: dict[str, float]
) -> None:
    """The others fit either: both are named, and the words say that the sheet cannot tell."""
    r = check_datasheet(_only(_sheet(**changed), *names))
    suspects = {r.odd_one_out, *r.rivals}
    assert suspects == set(names) - {"Mw_g_per_mol", "activation_energy"}
    assert "Two claims contradict each other" in r.verdict
    assert "cannot be told from the sheet alone" in r.verdict
    for j in r.claims:
        if j.quantity not in suspects:
            assert j.verdict in ("consistent", "cannot judge")


def test_culprit_that_the_others_leave_open_is_a_suspect() -> None:
    """The rate is off, but too open to be called inconsistent; the viscosity is not the only one
    that may be: with so few claims several are named."""
    names = ("Mn_g_per_mol", M2, V01, "activation_energy")
    r = check_datasheet(_only(_sheet(**{M2: 2.5}), *names))
    assert {M2, V01} <= {r.odd_one_out, *r.rivals}
    assert "activation_energy" not in {r.odd_one_out, *r.rivals}
    assert "cannot be told from the sheet alone" in r.verdict


@pytest.mark.parametrize(
    "changed",
    [{"eta0_Pa_s": 3.0, "activation_energy": 1.8}, {M2: 3.0, "Mz_g_per_mol": 0.3}],
)
def test_two_claims_off(changed: dict[str, float]) -> None:
    """Two unrelated faults: both named, the others judged without either."""
    r = check_datasheet(_sheet(**changed))
    assert {r.odd_one_out, *r.also_off} == set(changed)
    assert "Two claims do not fit the others" in r.verdict
    for j in r.claims:
        assert (j.verdict == "inconsistent") == (j.quantity in changed)


def test_no_few_claims_to_blame() -> None:
    """Every claim off by its own factor: the words do not pretend to know which."""
    rng = np.random.default_rng(3)
    sheet = _sheet()
    claims = [replace(c, value=c.value * float(np.exp(rng.normal(0, 1.5)))) for c in sheet.claims]
    r = check_datasheet(replace(sheet, claims=tuple(claims)))
    assert r.odd_one_out is not None
    assert "which of them are off cannot be told" in r.verdict


def test_quotients_say_nothing_new() -> None:
    """A flow rate ratio computed from two rates goes with the rate that is off, and is not
    evidence for it; one that is no quotient of them is a claim of its own."""
    sheet = _sheet(**{M2: 5.0})
    value = {c.quantity: c.value for c in sheet.claims}
    ratio = Claim("flow_rate_ratio", "flow rate ratio", round(value[M21] / value[M2], 1), 0.15,
                  temperature_C=190.0, load_kg=21.6, second_load_kg=2.16)  # fmt: skip
    r = check_datasheet(replace(sheet, claims=(*sheet.claims, ratio)))
    assert (r.odd_one_out, r.also_off) == (M2, ())
    assert "quotient of two numbers of the sheet" in r.paragraph()
    right = _sheet()
    off = replace(ratio, value=2.5 * ratio.value * 5.0)
    r = check_datasheet(replace(right, claims=(*right.claims, off)))
    assert r.odd_one_out == "flow_rate_ratio"


def test_activation_energy_that_depends_on_temperature_is_left_out() -> None:
    """Polystyrene's runs from 100 to 160 kJ/mol (WLF, Plazek & Agarwal 1978): a claim without its
    temperature cannot be held against one number."""
    claims = (
        Claim("Mw_g_per_mol", "Mw", 2.8e5, 0.1),
        Claim("eta0_Pa_s", "eta0", 3e4, 0.1, temperature_C=190.0),
        Claim("activation_energy", "activation energy", 95.0, 0.1),
    )
    r = check_datasheet(Sheet(claims, builtin("polystyrene")))
    assert [c.quantity for c in r.claims] == ["Mw_g_per_mol", "eta0_Pa_s"]
    assert any(w.code == "claim_not_used" for w in r.warnings)
    with pytest.raises(InputError, match="depends on the temperature"):
        check_datasheet(Sheet(claims[1:], builtin("polystyrene")))


def test_another_load_is_recognised() -> None:
    """A rate measured at 5 kg and printed as 2.16 kg: the words say so."""
    right = {c.quantity: c.value for c in _sheet().claims}
    z = np.zeros((1, 9))
    y = np.exp(sheet_model(HDPE, STUDY.POSSIBLE, "power-law").predict(z, "log-normal")[0])
    at_5 = float(y[[c.quantity for c in STUDY.POSSIBLE].index("melt_flow 5 kg 190 C")])
    name = "melt_flow 2.16 kg 190 C"
    r = check_datasheet(_sheet(**{name: at_5 / right[name]}))
    assert r.odd_one_out == name
    assert "measured at 5 kg" in r.paragraph()


def test_unit_slip_is_recognised() -> None:
    """A viscosity in poise printed as Pa s is ten times too high."""
    r = check_datasheet(_sheet(eta0_Pa_s=10.0))
    assert r.odd_one_out == "eta0_Pa_s"
    assert "unit had slipped by a factor 10" in r.paragraph()


def test_polystyrene_equivalent_is_recognised() -> None:
    """A weight average on the polystyrene scale is about twice the true one (recalled)."""
    sheet = _sheet(Mw_g_per_mol=2.2)
    claims = [
        replace(c, calibration="unstated") for c in sheet.claims if c.kind not in ("Mn", "Mz")
    ]
    r = check_datasheet(replace(sheet, claims=tuple(claims)))
    assert r.odd_one_out == "Mw_g_per_mol"
    assert "relative to polystyrene" in r.paragraph()


def test_other_temperatures_are_handled_and_slips_caught() -> None:
    """A rate at 210 C printed as one at 190 C stands out; printed as 210 C it fits."""
    card = HDPE
    name = "melt_flow 2.16 kg 190 C"
    factor = 1.0 / card.shift.factor(230.0, 190.0)
    r = check_datasheet(_sheet(**{name: factor}))
    assert r.odd_one_out == name and "at 230 C" in r.paragraph()
    claims = [
        replace(c, value=c.value * factor, temperature_C=230.0, quantity="melt_flow 2.16 kg 230 C")
        if c.quantity == name
        else c
        for c in _sheet().claims
    ]
    assert check_datasheet(Sheet(tuple(claims), card)).odd_one_out is None


def test_words_are_neutral() -> None:
    """What is said could be sent to the supplier (house rule)."""
    for changes in ({"eta0_Pa_s": 3.0}, {"melt_flow 21.6 kg 190 C": 0.4}):
        text = check_datasheet(_sheet(**changes)).paragraph().lower()
        for word in ("wrong", "false", "fake", "cheat", "lie", "fraud", "bad"):
            assert f" {word} " not in text and f" {word}." not in text
        assert "release tests decide" in text


EXAMPLE = """
polymer = "hdpe"
[claims]
Mn_g_per_mol = {value = 2.1e4, tolerance = 0.15, calibration = "equivalent"}
Mw_g_per_mol = {value = 1.2e5, tolerance = 0.10}
eta0_Pa_s = {value = 7.1e3, tolerance = 0.15, temperature_C = 190}
melt_flow = [{load_kg = 2.16, temperature_C = 190, MFR_g_per_10min = 1.1, tolerance = 0.10},
  {load_kg = 21.6, temperature_C = 190, MVR_cm3_per_10min = 52}]
flow_rate_ratio = {loads_kg = [21.6, 2.16], value = 36, tolerance = 0.15}
crossover = {omega_rad_per_s = 60, G_Pa = 3.0e4, tolerance = 0.15, temperature_C = 190}
viscosity = [{omega_rad_per_s = 0.1, value_Pa_s = 6.5e3, temperature_C = 190, tolerance = 0.10}]
intrinsic_viscosity = {value_dL_per_g = 1.7, solvent = "TCB", temperature_C = 135}
activation_energy = {value_kJ_per_mol = 28, tolerance = 0.10}
long_chain_branching = "none"
"""


def _written(tmp_path: Path, text: str) -> Path:
    path = tmp_path / "sheet.toml"
    path.write_text(text, encoding="utf-8")
    return path


def test_sheet_file(tmp_path: Path) -> None:
    """The sheet of the written contract, key by key."""
    sheet = read_sheet(_written(tmp_path, EXAMPLE))
    names = [c.quantity for c in sheet.claims]
    assert "melt_flow 2.16 kg 190 C" in names and "viscosity 0.1 rad/s 190 C" in names
    by_name = {c.quantity: c for c in sheet.claims}
    assert by_name["melt_flow 21.6 kg 190 C"].volume
    assert not by_name["melt_flow 21.6 kg 190 C"].tolerance_given
    assert by_name["Mn_g_per_mol"].calibration == "equivalent"
    assert by_name["flow_rate_ratio"].load_kg == 21.6
    assert sheet.branching == "none" and sheet.polymer.name == "hdpe"


def test_both_rates_of_one_test(tmp_path: Path) -> None:
    """A sheet may give MFR and MVR at one load; the same rate twice is refused."""
    both = """polymer = "hdpe"
[claims]
Mw_g_per_mol = 1.2e5
melt_flow = [{load_kg = 2.16, temperature_C = 190, MFR_g_per_10min = 1.1},
             {load_kg = 2.16, temperature_C = 190, MVR_cm3_per_10min = 1.45}]
"""
    names = [c.quantity for c in read_sheet(_written(tmp_path, both)).claims]
    assert names[1:] == ["melt_flow 2.16 kg 190 C", "melt_flow 2.16 kg 190 C MVR"]
    with pytest.raises(InputError, match="claimed twice"):
        read_sheet(_written(tmp_path, both.replace("MVR_cm3", "MFR_g")))


@pytest.mark.parametrize(
    "line",
    ["Mw_g_per_mol = 0", "eta0_Pa_s = {value = -5}", 'eta0_Pa_s = {value = "high"}',
     "Mw_g_per_mol = inf", "dispersity = nan", "Mw_g_per_mol = {value = 1e5, tolerance = 0}",
     "Mw_g_per_mol = {value = 1e5, tolerance = -0.1}", 'Mw_g_per_mol = "much"',
     "Mw_g_per_mol = {}", "melt_flow = [{load_kg = 2.16}]", "melt_flow = 3.0",
     "melt_flow = [{load_kg = 0, MFR_g_per_10min = 1}]", "crossover = {}", "colour = 3",
     "flow_rate_ratio = {value = 30, loads_kg = [2.16, 2.16]}", "dispersity = 0.5",
     "eta0_Pa_s = {value = 1e4, temperature_C = 900}", "activation_energy = true"],
)  # fmt: skip
def test_odd_inputs_are_refused_with_their_line(tmp_path: Path, line: str) -> None:
    """Zero, negative, text, nothing, unknown names: an error of the input, never a crash."""
    text = f'polymer = "hdpe"\n[claims]\nMz_g_per_mol = 5e5\n{line}\n'
    with pytest.raises(InputError) as caught:
        read_sheet(_written(tmp_path, text))
    assert caught.value.row == 4 and caught.value.path is not None


@pytest.mark.parametrize(
    ("old", "new", "words", "row"),
    [
        ("Mw_g_per_mol", "Mw_g_mol", "Did you mean 'Mw_g_per_mol'", 5),
        ("value = 1.2e5", "value = 1.2", "out of range", 5),
        ("tolerance = 0.10}\n", "tolerance = 10}\n", "must be a fraction", 5),
        ('"equivalent"', '"relative"', "unknown calibration", 4),
        ("MFR_g_per_10min = 1.1", "MFR = 1.1", "no key 'MFR'", 7),
        ('"none"', '"maybe"', 'Write "none" or "some"', 14),
        ("[claims]", "[claim]", "Did you mean 'claims'", 3),
        ("value = 7.1e3", "value = 7,1e3", "no TOML", 6),
    ],
)
def test_slips_in_a_sheet(tmp_path: Path, old: str, new: str, words: str, row: int) -> None:
    """Each slip is refused with its line and a remedy."""
    with pytest.raises(InputError) as caught:
        read_sheet(_written(tmp_path, EXAMPLE.replace(old, new, 1)))
    assert words in str(caught.value)
    assert caught.value.row is None or abs(caught.value.row - row) <= 1


def test_too_little_to_compare() -> None:
    """One claim cannot be compared with anything."""
    with pytest.raises(InputError, match="1 claim"):
        check_datasheet(Sheet((Claim("Mw_g_per_mol", "Mw", 1e5, 0.1),), HDPE))
    with pytest.raises(InputError, match="no polymer"):
        check_datasheet(replace(_sheet(), polymer=None))


@pytest.mark.full
def test_targets_over_many() -> None:
    """The figures of docs/datasheet.md: false alarms, and claims off that are named."""
    plain, hits = STUDY.study(range(1000, 1200), [4.0])
    assert len(plain["alarms"]) <= 10
    assert np.mean([r["named"] for r in hits[4.0]]) >= 0.8


def test_every_claim_carries_its_unit(clean: object) -> None:
    """Interface: the number and its unit stand together; a ratio has none."""
    table = clean.tables()["claims.csv"]  # type: ignore[attr-defined]
    units = dict(zip(table["quantity"], table["unit"], strict=True))
    assert units["Mw_g_per_mol"] == "g/mol"
    assert all(u == "g/10 min" for q, u in units.items() if q.startswith("melt_flow"))
    assert [c.unit for c in clean.claims if c.quantity == "dispersity"] in ([], [""])  # type: ignore[attr-defined]
