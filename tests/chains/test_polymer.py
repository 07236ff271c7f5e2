"""Polymer cards: what is computed, what is refused, and what is only said."""

from __future__ import annotations

import copy
import json
import math
import pickle
import tomllib
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from mwdlink.chains.card import OWN_STATUSES, SECTIONS, STATUSES
from mwdlink.chains.melt import estimate_equilibration_time
from mwdlink.chains.polymer import Polymer, builtin, builtin_names, template_text
from mwdlink.chains.shift import (
    GAS_CONSTANT,
    ShiftLaw,
    arrhenius_factor,
    rereference_wlf,
    wlf_factor,
)
from mwdlink.errors import InputError, ModelError

BARE: dict[str, Any] = {
    "name": "invented",
    "network": {"plateau_modulus_Pa": 1.0e6, "status": "measured", "source": "invented"},
    "viscosity": {
        "coefficient": 1e-14,
        "exponent": 3.5,
        "temperature_C": 150,
        "status": "measured",
        "source": "invented",
    },
    "density": {"kg_per_m3": 800, "status": "measured", "source": "invented"},
}
WLF = {"kind": "wlf", "c1": 6.17, "c2_K": 141.8, "reference_C": 180, "status": "fitted"}
ARRHENIUS = {"kind": "arrhenius", "energy_kJ_per_mol": 30, "status": "fitted"}


def card(**changes: Any) -> dict[str, Any]:
    """The bare card with sections updated; a key set to None is removed."""
    mapping = copy.deepcopy(BARE)
    for section, block in changes.items():
        if not isinstance(block, dict):
            mapping[section] = block
            continue
        target = mapping.setdefault(section, {})
        for key, value in block.items():
            if value is None:
                target.pop(key)
            else:
                target[key] = value
    return mapping


def codes(thing: Any) -> list[str]:
    return [w.code for w in thing.warnings]


# --- what is computed -------------------------------------------------------------------------


def test_entanglement_molar_mass_is_the_definition():
    """Compared with the definition M_e = 1000 rho R T/G_N (SI constants; derived)."""
    melt = Polymer.from_dict(BARE).melt()
    assert melt.entanglement_molar_mass == pytest.approx(
        1000 * 800 * 8.314462618 * 423.15 / 1e6, rel=1e-12
    )
    # G_e/Z = rho R T/M is what the 1.25 and the 0.8 are for
    M = 3.0e5
    assert melt.entanglement_modulus / melt.Z(M) == pytest.approx(
        1000 * 800 * GAS_CONSTANT * 423.15 / M, rel=1e-12
    )


def test_density_is_taken_to_the_law_s_temperature():
    """M_e uses the density at the viscosity law's temperature, not where it was measured."""
    p = Polymer.from_dict(card(density={"temperature_C": 50, "expansion_per_K": 7e-4}))
    assert p.density() == pytest.approx(800 * math.exp(-0.07))
    assert p.entanglement_molar_mass == pytest.approx(
        1000 * p.density() * GAS_CONSTANT * 423.15 / 1e6
    )


def test_viscosity_law_below_the_critical_molar_mass():
    """Exponent 1 below M_c and no step there (common practice)."""
    melt = Polymer.from_dict(card(viscosity={"critical_molar_mass_g_per_mol": 8000})).melt()
    M = np.array([1e3, 2e3, 8e3, 8.0001e3, 1e5])
    eta = melt.zero_shear_law(M)
    assert eta[1] / eta[0] == pytest.approx(2.0)
    assert eta[3] / eta[2] == pytest.approx(1.0, rel=1e-4)
    assert eta[4] == pytest.approx(1e-14 * 1e5**3.5)
    assert isinstance(melt.zero_shear_law(1e5), float)
    bare = Polymer.from_dict(BARE).melt()
    assert bare.zero_shear_law(1e3) == pytest.approx(1e-14 * 1e3**3.5)


def test_estimated_equilibration_time():
    """The estimate by its formula, written out (derived); flagged as an estimate."""
    melt = Polymer.from_dict(BARE).melt()
    strand = melt.entanglement_molar_mass
    by_hand = 1e-14 * (24 * strand) ** 3.5 / (0.347 * 1e6 * 3 * 27000 * 0.5155)
    assert melt.equilibration_time_estimated
    assert melt.equilibration_time == pytest.approx(by_hand, rel=1e-12)


def test_card_s_tau_e_only_with_its_own_strand():
    """A tau_e that came with another M_e is not used, and that is said."""
    given_time = {"equilibration_time_s": 1e-6}
    melt = Polymer.from_dict(card(network=given_time)).melt()
    assert melt.equilibration_time == 1e-6 and not melt.equilibration_time_estimated
    foreign = Polymer.from_dict(
        card(network={**given_time, "equilibration_time_molar_mass_g_per_mol": 2000})
    )
    assert foreign.melt().equilibration_time_estimated
    assert "equilibration_time_unused" in codes(foreign)
    row = foreign.to_dict()["network"]
    assert row["equilibration_time_s_status"] == "computed"


# --- temperature ------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "T, c1, c2", [(160, 7.18, 121.8), (190, 5.76, 151.8), (100, 14.16, 61.8)]
)
def test_wlf_rereferencing_against_printed_pairs(T, c1, c2):
    """Polystyrene, 6.17/141.8 K at 180 C, against the pairs printed for other references
    (Plazek & Agarwal, J. Appl. Polym. Sci. 22 (1978) 2127, fitted from their data)."""
    new_c1, new_c2 = rereference_wlf(6.17, 141.8, 180.0, T)
    assert round(new_c2, 1) == c2
    assert abs(new_c1 - c1) <= 0.005 + 1e-9


@given(
    c1=st.floats(1, 20),
    c2=st.floats(60, 300),
    step=st.floats(-50, 100),
    T=st.floats(-50, 100),
    origin=st.floats(-50, 100),
)
def test_rereferencing_changes_no_shift_factor(c1, c2, step, T, origin):
    """The same law at any reference gives the same a_T between two temperatures (derived)."""
    moved = rereference_wlf(c1, c2, 0.0, step)
    a = wlf_factor(c1, c2, 0.0, T, origin)
    assert wlf_factor(*moved, step, T, origin) == pytest.approx(a, rel=1e-9)
    assert wlf_factor(c1, c2, 0.0, origin, T) == pytest.approx(1 / a, rel=1e-9)


def test_arrhenius_by_hand():
    """exp(E/R (1/T - 1/T0)) written out (common practice)."""
    assert arrhenius_factor(26800, 150, 190) == pytest.approx(
        math.exp(26800 / 8.314462618 * (1 / 423.15 - 1 / 463.15))
    )


def test_activation_energy_is_the_slope():
    """Apparent activation energy of a WLF law against a numerical derivative (derived)."""
    law = ShiftLaw("wlf", c1=6.17, c2=141.8, reference_C=180.0)
    T, d = 160.0, 1e-3
    slope = (math.log(law.factor(T + d, T)) - math.log(law.factor(T - d, T))) / (
        1 / (T + d + 273.15) - 1 / (T - d + 273.15)
    )
    assert law.activation_energy(T) == pytest.approx(GAS_CONSTANT * slope, rel=1e-6)
    assert ShiftLaw("arrhenius", energy_J_per_mol=3e4).activation_energy(T) == 3e4


def test_times_shift_and_moduli_stay():
    """Viscosity and tau_e by a_T, moduli and M_e as they are (the default)."""
    p = Polymer.from_dict(card(shift=ARRHENIUS))
    own, hot = p.melt(), p.melt(190)
    assert hot.a_T == pytest.approx(arrhenius_factor(30000, 190, 150)) and hot.a_T < 1
    assert hot.law_coefficient == pytest.approx(own.law_coefficient * hot.a_T)
    assert hot.equilibration_time == pytest.approx(own.equilibration_time * hot.a_T)
    assert hot.plateau_modulus == own.plateau_modulus and hot.b_T == 1.0
    assert hot.entanglement_molar_mass == own.entanglement_molar_mass
    assert hot.kelvin == pytest.approx(463.15)


def test_modulus_by_rho_T():
    """b_T = rho T/(rho0 T0) where the card asks for it; viscosity by a_T b_T, so that
    eta0/(G_N tau_e) is the same at both temperatures: exact superposition (derived)."""
    mapping = card(
        shift={**ARRHENIUS, "modulus": "rho-T"},
        density={"expansion_per_K": 6e-4},
        network={"plateau_modulus_range_Pa": [9e5, 1.1e6]},
    )
    own, hot = (Polymer.from_dict(mapping).melt(T) for T in (150, 190))
    assert hot.b_T == pytest.approx(math.exp(-6e-4 * 40) * 463.15 / 423.15)
    assert hot.plateau_modulus == pytest.approx(own.plateau_modulus * hot.b_T)
    assert hot.plateau_range == pytest.approx((9e5 * hot.b_T, 1.1e6 * hot.b_T))

    def ratio(m):
        return m.zero_shear_law(1e5) / (m.plateau_modulus * m.equilibration_time)

    assert ratio(hot) == pytest.approx(ratio(own), rel=1e-12)


def test_no_shift_law_is_a_clear_refusal():
    """Another temperature without a shift law: refused, with what to do."""
    p = Polymer.from_dict(BARE)
    assert p.melt(150.05).temperature_C == 150.05
    with pytest.raises(ModelError, match=r"no shift law.*150 C.*\[shift\]"):
        p.melt(160)


def test_modest_extrapolation_is_said_and_absurd_one_refused():
    """Beyond the range: a caution; far beyond, near the WLF singularity, not finite: refused."""
    ranged = Polymer.from_dict(card(shift={**ARRHENIUS, "range_C": [140, 200]}))
    assert "temperature_extrapolated" not in codes(ranged.melt(200))
    assert "temperature_extrapolated" in codes(ranged.melt(215))
    with pytest.raises(ModelError, match="Check that the temperature is in C"):
        ranged.melt(463)
    wlf = Polymer.from_dict(card(shift=WLF))
    assert "temperature_extrapolated" in codes(wlf.melt(100))
    with pytest.raises(ModelError, match="ends at 38.2 C"):
        wlf.melt(45)
    for T in (float("nan"), float("inf"), -400.0):
        with pytest.raises(ModelError, match="no temperature"):
            wlf.melt(T)
    with pytest.raises(ModelError, match="cannot be referred"):
        rereference_wlf(6.17, 141.8, 180, 38)


def test_constant_density_far_from_its_temperature_is_said():
    p = Polymer.from_dict(card(shift=ARRHENIUS))
    assert "density_constant" not in codes(p.melt(165))
    assert "density_constant" in codes(p.melt(190))


# --- a perturbed copy -------------------------------------------------------------------------


def test_perturbed_time_and_exponent():
    """The exponent turns the law about its pivot, not about 1 g/mol; time_factor scales all."""
    melt = Polymer.from_dict(card(viscosity={"range_g_per_mol": [1e4, 1e6]})).melt()
    turned = melt.with_(law_exponent=3.4)
    assert melt.law_pivot == pytest.approx(1e5)
    assert turned.zero_shear_law(1e5) == pytest.approx(melt.zero_shear_law(1e5))
    assert turned.zero_shear_law(1e6) == pytest.approx(
        melt.zero_shear_law(1e6) * 10 ** (-0.1), rel=1e-9
    )
    here = melt.with_(law_exponent=3.4, pivot=3e5)
    assert here.zero_shear_law(3e5) == pytest.approx(melt.zero_shear_law(3e5))
    slow = melt.with_(time_factor=1.3)
    assert slow.law_coefficient == pytest.approx(1.3 * melt.law_coefficient)
    assert slow.equilibration_time == pytest.approx(1.3 * melt.equilibration_time)
    assert melt.with_() == melt


def test_perturbed_plateau_modulus():
    """M_e as 1/G_N; an estimated tau_e is estimated anew, the card's goes as M_e^2 (the Rouse
    time tau_e Z^2 of a chain stands; derived)."""
    for network in ({}, {"equilibration_time_s": 1e-6}):
        melt = Polymer.from_dict(card(network=network)).melt()
        stiff = melt.with_(plateau_modulus=1.2e6)
        assert stiff.entanglement_molar_mass == pytest.approx(melt.entanglement_molar_mass / 1.2)
        if network:
            assert stiff.equilibration_time * stiff.Z(1e5) ** 2 == pytest.approx(
                melt.equilibration_time * melt.Z(1e5) ** 2
            )
        else:
            assert stiff.equilibration_time == pytest.approx(
                estimate_equilibration_time(1e-14, 3.5, 1.2e6, stiff.entanglement_molar_mass)
            )
    with pytest.raises(ModelError, match="plateau modulus"):
        melt.with_(plateau_modulus=-1.0)
    with pytest.raises(ModelError, match="time factor"):
        melt.with_(time_factor=float("nan"))


# --- what is refused --------------------------------------------------------------------------

REFUSED = [
    (card(network={"plateau_modulus_pa": 1e6}), "network.plateau_modulus_pa", "Did you mean"),
    (card(network={"plateau_modulus_Pa": None}), "network.plateau_modulus_Pa", "Add"),
    (card(network={"scatter_decades": 0.1}), "network.scatter_decades", r"belongs in \[viscosity"),
    (card(viscosity={"repeat_unit_g_per_mol": 28}), "viscosity.repeat_unit_g_per_mol", "top of"),
    (card(network={"molar_mass_g_per_mol": 2251.7}), "network.molar_mass_g_per_mol", "other conv"),
    (card(network={"molar_mass_g_per_mol": 3000}), "network.molar_mass_g_per_mol", "belong"),
    (card(network={"plateau_modulus_Pa": "1e6"}), "network.plateau_modulus_Pa", "without quotes"),
    (card(network={"plateau_modulus_Pa": True}), "network.plateau_modulus_Pa", "number"),
    (card(network={"plateau_modulus_Pa": -1.0}), "network.plateau_modulus_Pa", "above zero"),
    (card(network={"plateau_modulus_Pa": 10**400}), "network.plateau_modulus_Pa", "finite"),
    (card(network={"plateau_modulus_Pa": float("inf")}), "network.plateau_modulus_Pa", "finite"),
    (card(network={"plateau_modulus_Pa": 1.0}), "network.plateau_modulus_Pa", "MPa"),
    (card(network={"plateau_modulus_Pa": float("nan")}), "network.plateau_modulus_Pa", "nan"),
    (card(network={"plateau_modulus_range_Pa": [2e6, 1e6]}), "network.plateau_modulus_range_Pa",
     "lower number first"),
    (card(network={"plateau_modulus_range_Pa": [2e6]}), "network.plateau_modulus_range_Pa",
     r"\[low, high\]"),
    (card(network={"status": "publishd"}), "network.status", "Did you mean 'published'"),
    (card(network={"plateau_modulus_Pa_status": 3}), "network.plateau_modulus_Pa_status", "one of"),
    (card(network={"source": 3}), "network.plateau_modulus_Pa_source", "text"),
    (card(density={"kg_per_m3": 0.8}), "density.kg_per_m3", "g/cm3"),
    (card(viscosity={"temperature_C": -300}), "viscosity.temperature_C", "in K"),
    (card(viscosity={"exponent": 34}), "viscosity.exponent", "1 to 8"),
    (card(shift={"kind": "vft"}), "shift.kind", "arrhenius"),
    (card(shift={"kind": "arrhenius"}), "shift.energy_kJ_per_mol", "needs"),
    (card(shift={**WLF, "energy_kJ_per_mol": 30}), "shift.energy_kJ_per_mol", "no meaning"),
    (card(shift={**WLF, "c2_K": 20}), "shift.c2_K", "ends at 160 C"),
    (card(shift={**ARRHENIUS, "energy_kJ_per_mol": 26800}), "shift.energy_kJ_per_mol", "J/mol"),
    (card(shift={**ARRHENIUS, "modulus": "rhoT"}), "shift.modulus", "rho-T"),
    (card(kernel={"power_law_n": 1.2}), "kernel.power_law_n", "0.01 to 0.99"),
    (card(kernel={"mixing_exponent": 0.5}), "kernel.mixing_exponent", "double reptation"),
    (card(mark_houwink={"K_dL_per_g": 4e-4, "a": 0.7}), "mark_houwink.solvent", "Add"),
    (card(title=3), "title", "text"),
    (card(shfit={"kind": "wlf"}), "shfit", "Did you mean 'shift'"),
    (card(notes="x"), "notes", "Did you mean 'note'"),
    (card(network=3), "network", r"\[network\]"),
    ({k: v for k, v in BARE.items() if k != "density"}, "density", "kg_per_m3"),
]  # fmt: skip


@pytest.mark.parametrize("mapping, column, words", REFUSED, ids=[r[1] for r in REFUSED])
def test_refusals_name_the_key_and_the_remedy(mapping, column, words):
    """Every refusal carries the file, the key and what to do (this project's own rule)."""
    with pytest.raises(InputError, match=words) as caught:
        Polymer.from_dict(mapping, origin="my.toml")
    assert caught.value.column == column
    assert caught.value.path == "my.toml"


def test_not_a_mapping():
    with pytest.raises(InputError, match="table of sections"):
        Polymer.from_dict([1, 2])  # type: ignore[arg-type]


# --- what is only said ------------------------------------------------------------------------


@pytest.mark.parametrize(
    "changes, words",
    [
        ({"viscosity": {"critical_molar_mass_g_per_mol": 1000}}, "M_c = 1000 lies below M_e"),
        ({"viscosity": {"critical_molar_mass_g_per_mol": 1e5}}, "times M_e"),
        ({"viscosity": {"exponent": 4.5}}, "usual 3 to 4"),
        (
            {"viscosity": {"critical_molar_mass_g_per_mol": 6e3, "range_g_per_mol": [1e3, 1e5]}},
            "range begins below",
        ),
        ({"network": {"plateau_modulus_range_Pa": [2e6, 3e6]}}, "lies outside network"),
        ({"network": {"plateau_modulus_Pa": 2e4}}, "outside the usual"),
        ({"shift": {**ARRHENIUS, "range_C": [160, 200]}}, "lies outside shift.range_C"),
        ({"kernel": {"mixing_exponent": 3, "mixing_exponent_range": [1, 2]}}, "lies outside ker"),
    ],
)
def test_unusual_relations_warn_and_never_refuse(changes, words):
    p = Polymer.from_dict(card(**changes))
    said = [w.text for w in p.melt().warnings if w.code == "card_unusual"]
    assert len(said) == 1 and words in said[0]


def test_a_number_without_status_is_said():
    p = Polymer.from_dict(card(density={"status": None}))
    assert codes(p) == ["card_status_unstated"]
    assert "density.kg_per_m3" in p.warnings[0].text
    assert p.constants["density.kg_per_m3"].status == "unstated"
    assert Polymer.from_dict(BARE).warnings == ()


def test_note_and_dispute_reach_the_melt():
    p = Polymer.from_dict(
        card(note="mind the gap", network={"plateau_modulus_disputed_Pa": [2e6, 3e6]})
    )
    texts = {w.code: w.text for w in p.melt().warnings}
    assert "mind the gap" in texts["card_note"]
    assert "2e+06 to 3e+06 Pa" in texts["plateau_modulus_disputed"]


# --- shapes -----------------------------------------------------------------------------------


def test_key_status_and_source_override_the_section():
    p = Polymer.from_dict(
        card(viscosity={"exponent_status": "recalled", "exponent_source": "memory"})
    )
    assert p.constants["viscosity.exponent"].status == "recalled"
    assert p.constants["viscosity.exponent"].source == "memory"
    assert p.constants["viscosity.coefficient"].status == "measured"
    assert p.constants["viscosity.coefficient"].source == "invented"


@pytest.mark.parametrize("name", builtin_names())
def test_card_as_used_reads_back_to_the_same_melt(name):
    """to_dict is JSON, holds every number in use with a status, and is itself a card."""
    p = builtin(name)
    mapping = json.loads(json.dumps(p.to_dict()))
    again = Polymer.from_dict(mapping)
    assert again.melt() == p.melt()
    assert mapping["network"]["molar_mass_g_per_mol"] == pytest.approx(
        p.entanglement_molar_mass, rel=0.03
    )
    assert "equilibration_time_s" in mapping["network"]


def test_constants_table_rows():
    rows = builtin("polystyrene").constants_table()
    assert list(rows[0]) == ["key", "value", "unit", "status", "source"]
    by_key = {r["key"]: r for r in rows}
    assert by_key["network.molar_mass_g_per_mol"]["status"] == "computed"
    assert by_key["network.equilibration_time_s"]["status"] == "computed"
    assert by_key["kernel.power_law_n"] == {
        "key": "kernel.power_law_n", "value": 0.23, "unit": "-", "status": "assumed",
        "source": "default",
    }  # fmt: skip
    for row in rows:
        if not isinstance(row["value"], str):
            assert row["status"] in STATUSES + OWN_STATUSES


def test_polymer_and_melt_travel_to_workers_and_cannot_be_changed():
    p = builtin("hdpe")
    assert pickle.loads(pickle.dumps(p)) == p
    assert pickle.loads(pickle.dumps(p.melt(150))) == p.melt(150)
    with pytest.raises(AttributeError):
        p.melt().density = 1.0  # type: ignore[misc]
    with pytest.raises(TypeError):
        p.constants["x"] = 1  # type: ignore[index]


def test_template_is_refused_until_filled_and_knows_every_key():
    """The shipped template parses, lists what is missing, and names every key there is."""
    text = template_text()
    mapping = tomllib.loads(text)
    with pytest.raises(InputError, match="not filled in yet: .*coefficient") as caught:
        Polymer.from_dict(mapping)
    assert "density.kg_per_m3" in str(caught.value)
    for section, keys in SECTIONS.items():
        assert section == "" or f"[{section}]" in text
        for key in keys:
            assert key in text or key in ("c1", "c2_K", "reference_C")
    whole = text.replace("repeat_unit_g_per_mol = nan", "repeat_unit_g_per_mol = 100.1")
    for key, value in (
        ("plateau_modulus_Pa", "5e5"), ("coefficient", "1e-14"), ("exponent", "3.4"),
        ("temperature_C", "190"), ("kg_per_m3", "1100"),
    ):  # fmt: skip
        whole = whole.replace(f"\n{key} = nan", f"\n{key} = {value}")
    filled = Polymer.from_dict(tomllib.loads(whole))
    assert filled.warnings == ()
    assert filled.melt().plateau_modulus == 5e5


@pytest.mark.parametrize(
    "name, hint",
    [("hdp", "'hdpe'"), ("PS", "'polystyrene'"), ("pp", "'pp-isotactic'"), ("PMMA", "tacticity"),
     ("ldpe", "branched"), ("zzz", "Built-in are hdpe")],
)  # fmt: skip
def test_unknown_names_get_a_hint(name, hint):
    with pytest.raises(InputError, match="no built-in polymer") as caught:
        builtin(name)
    assert hint in str(caught.value)
    assert "template" not in builtin_names()
