"""Targets as ranges, several targets at once, and the component that is varied."""

from __future__ import annotations

import json

import numpy as np
import pytest
from click.testing import CliRunner
from decisions.made_up import HDPE, A, B, sweep

from mwdlink.chains.families import lognormal
from mwdlink.cli.main import main
from mwdlink.decisions.blend import blend
from mwdlink.decisions.blend_target import parse_target
from mwdlink.decisions.blend_targets import find_all, find_range, within
from mwdlink.decisions.components import Component
from mwdlink.errors import InputError
from mwdlink.figures import pictures_of
from mwdlink.relaxation.mixing import Model
from mwdlink.report.blend_live import check

PHI = np.linspace(0, 1, 101)
FALLING = 10.0 ** (2 - PHI)
C = lognormal(1e5, 2.0, label="C")


@pytest.mark.parametrize(
    "text, low, high, words",
    [
        ("eta0_Pa_s=1e4:2e4", 1e4, 2e4, "a zero-shear viscosity from 1e+04 to 2e+04 Pa s"),
        ("MFR_g_per_10min@2.16=:1.5", None, 1.5, "a melt flow rate at 2.16 kg up to 1.5 g/10 min"),
        ("tan_delta@0.1 = 2:", 2.0, None, "a loss factor tan delta at 0.1 rad/s from 2 up"),
    ],
)
def test_ranges_are_read(text, low, high, words):
    """Compared with the documented forms: LOW:HIGH with either end left out."""
    t = parse_target(text)
    assert (t.wanted, t.low, t.high, t.words()) == (None, low, high, words)


@pytest.mark.parametrize("text", ["eta0_Pa_s=:", "eta0_Pa_s=2:1", "eta0_Pa_s=1:1", "eta0_Pa_s=1:x"])
def test_bad_ranges_are_refused(text):
    """Compared with the documented forms."""
    with pytest.raises(InputError):
        parse_target(text)


def test_a_range_is_met_over_a_stretch():
    """Compared with 10^(2 - phi) within 20 to 50: phi from log10 2 to log10 5 (derived)."""
    t = parse_target("eta0_Pa_s=20:50")
    ((low, high),) = within(t, PHI, FALLING)
    assert (low, high) == pytest.approx((np.log10(2), np.log10(5)), abs=1e-3)
    members = np.stack([FALLING * f for f in np.linspace(0.9, 1.1, 41)])
    f = find_range(t, "A", PHI, FALLING, PHI, members)
    assert f.windows == ((low, high),) and f.shares == (1.0,)
    # nine in ten: all but the outermost tenth of the factors on that side
    sure_low, sure_high = f.sure[0]
    assert sure_low == pytest.approx(np.log10(2 * 1.08), abs=0.012)
    assert sure_high == pytest.approx(np.log10(5 * 0.92), abs=0.012)
    assert sure_low <= f.fractions[0].value <= sure_high


def test_open_ranges_humps_and_ranges_out_of_reach():
    """Compared with made-up properties: one-sided, two stretches, none."""
    above = within(parse_target("eta0_Pa_s=50:"), PHI, FALLING)
    assert above == [(0.0, pytest.approx(np.log10(2), abs=1e-3))]
    humped = 1 + 4 * PHI * (1 - PHI)
    f = find_range(parse_target("Je0_per_Pa=:1.64"), "A", PHI, humped, PHI, None)
    assert [w for pair in f.windows for w in pair] == pytest.approx([0, 0.2, 0.8, 1], abs=1e-3)
    assert "2 stretches" in f.reason
    none = find_range(parse_target("eta0_Pa_s=200:300"), "A", PHI, FALLING, PHI, FALLING[None, :])
    assert none.fractions == () and none.reachable == pytest.approx((10, 100))
    gone = np.where(PHI > 0.5, np.nan, FALLING)
    assert within(parse_target("eta0_Pa_s=:1e9"), PHI, gone) == [(0.0, pytest.approx(0.5))]
    nothing = find_range(parse_target("eta0_Pa_s=1:2"), "A", PHI, PHI * np.nan, PHI, None)
    assert nothing.reachable is None


def test_several_targets_are_met_where_their_stretches_overlap():
    """Compared with the intersection of two ranges, and of a range with a value's interval."""
    values = {"eta0_Pa_s": FALLING, "Je0_per_Pa": 1 + PHI}
    members = {k: np.stack([v * f for f in np.linspace(0.95, 1.05, 21)]) for k, v in values.items()}

    def both(*texts, drawn=members):
        targets = [parse_target(t) for t in texts]
        return find_all(targets, ["A", "B"], np.array([0.5, 0.5]), PHI, values, (PHI, drawn))

    found, met = both("eta0_Pa_s=20:50", "Je0_per_Pa=1.5:1.9")
    assert len(found) == 2 and len(met.fractions) == 1
    f = met.fractions[0]
    assert (f.low, f.high) == pytest.approx((0.5, np.log10(5)), abs=1e-3)
    assert f.value == pytest.approx((f.low + f.high) / 2) and met.shares[0] == 1.0
    found, met = both("eta0_Pa_s=20:50", "Je0_per_Pa=1.2")
    assert met.fractions == () and met.reason.startswith("None meets all")
    assert "a steady compliance of 1.2 1/Pa is met at 20 %" in met.reason
    found, met = both("eta0_Pa_s=20:50", "Je0_per_Pa=1.32")
    own = found[1].fractions[0]
    assert met.fractions[0].low == pytest.approx(max(own.low, np.log10(2)), abs=1e-3)
    assert met.fractions[0].high == pytest.approx(own.high) and met.shares == (None,)
    found, met = both("eta0_Pa_s=20:50", "Je0_per_Pa=5")
    assert "is met by no fraction" in met.reason
    # without members a fraction has no interval; near ones count as one
    found, met = both("eta0_Pa_s=31.6", "Je0_per_Pa=1.502", drawn={})
    assert len(met.fractions) == 1 and met.fractions[0].value == pytest.approx(0.501, abs=0.003)


def test_targets_of_a_blend():
    """Compared with blends at the ends that are told, and with the unchanged single form."""
    more = {"members": 40}
    one = blend([A, B], None, HDPE, target="eta0_Pa_s=2e4", **more)
    assert one.all_met is None and "targets" not in one.to_dict()
    two = blend([A, B], None, HDPE, target=["eta0_Pa_s=2e4", "viscosity_Pa_s@1=4e3:7e3"], **more)
    d = two.to_dict()
    json.dumps(d, allow_nan=False)
    assert d["target"] == one.to_dict()["target"] and len(d["targets"]) == 2
    assert d["targets"][1]["range"] == {"low": 4e3, "high": 7e3}
    low, high = (d["targets"][1]["windows"][0][k] for k in ("low", "high"))
    for p, wanted in ((low, 7e3), (high, 4e3)):
        again = blend([A, B], [p, 1 - p], HDPE, members=0)
        assert again.outputs.values["viscosity_Pa_s@1"] == pytest.approx(wanted, rel=5e-3)
    met = d["targets_met"]["fractions"][0]
    f = d["target"]["fractions"][0]
    assert met["low"] == pytest.approx(max(low, f["low"]))
    assert met["high"] == pytest.approx(min(high, f["high"]))
    assert "Both targets" in two.answer()
    ranged = blend([A, B], None, HDPE, target="viscosity_Pa_s@1=4e3:7e3", **more)
    assert "target" not in check(ranged.live_data())
    assert "is met at" in ranged.answer()
    picture = pictures_of("blend", ranged.to_dict(), ranged.tables())["fractions"]
    assert "The target 4000 to 7000 is kept from" in picture.description
    assert blend([A, B], None, HDPE, target=("eta0_Pa_s", 2e4), members=0).target is not None
    with pytest.raises(InputError, match="twice"):
        blend([A, B], None, HDPE, target=["eta0_Pa_s=2e4", "eta0_Pa_s=2e4"], members=0)


def test_another_component_can_be_varied():
    """Compared with the same line of fractions seen from the other end, and with direct blends."""
    first = blend([A, B], [0.7, 0.3], HDPE, target="eta0_Pa_s=2e4", members=0)
    other = blend([A, B], [0.7, 0.3], HDPE, target="eta0_Pa_s=2e4", vary="B", members=0)
    a, b = (r.target.fractions[0].value for r in (first, other))
    assert a + b == pytest.approx(1.0, abs=1e-4) and other.target.component == "B"
    assert other.to_dict()["blend"]["fractions"] == {"B": 0.3, "A": 0.7}
    assert other.outputs.values["eta0_Pa_s"] == pytest.approx(first.outputs.values["eta0_Pa_s"])
    assert check(other.live_data())["components"] == ["B", "A"]
    with pytest.raises(InputError, match="no component 'X'"):
        blend([A, B], [0.7, 0.3], HDPE, vary="X", members=0)


def test_three_components_say_what_the_rest_is():
    """Compared with a blend of the found fraction and the proportions told."""
    parts = [Component(d.label, d) for d in (A, B, C)]
    r = blend(parts, [50, 30, 20], HDPE, target="eta0_Pa_s=2.2e4", vary="B", members=0)
    t = r.to_dict()["target"]
    assert t["component"] == "B"
    assert t["rest"] == pytest.approx({"A": 5 / 7, "C": 2 / 7})
    assert "The rest is 71.4 % A and 28.6 % C" in t["reason"]
    p = t["fractions"][0]["value"]
    again = blend(parts, [(1 - p) * 5 / 7, p, (1 - p) * 2 / 7], HDPE, members=0)
    assert again.outputs.values["eta0_Pa_s"] == pytest.approx(2.2e4, rel=5e-3)
    f = r.tables()["fractions.csv"]
    assert str(f.columns[0]) == "fraction B [-]"
    assert f["fraction A [-]"].iloc[0] == pytest.approx(5 / 7)


def test_fractions_of_filled_bags_are_explained():
    """Compared with 60/40 bags, 30 % filler in the first: 42/(42 + 40) of polymer (derived)."""
    parts = [Component("A", A, filler=0.3), Component("B", B)]
    told = {w.code: w.text for w in blend(parts, [60, 40], HDPE, members=0).warnings}
    assert "51.2 % A, 48.8 % B" in told["fractions_of_polymer"]


def test_targets_on_the_command_line(tmp_path):
    """Compared with the same through Python: repeated targets, a range, the component varied."""
    paths = []
    for d in (A, B):
        x = np.linspace(3, 7, 81)
        y = np.interp(x, np.log10(d.molar_mass), d.density, left=0.0, right=0.0)
        paths.append(tmp_path / f"{d.label}.csv")
        rows = "\n".join(f"{10**m:.6g},{w:.6g}" for m, w in zip(x, y, strict=True))
        paths[-1].write_text(f"M [g/mol],dW/dlog10M\n{rows}\n")
    words = ["blend", *map(str, paths), "--polymer", "hdpe", "--calibration", "absolute", "--json"]
    words += ["--target", "eta0_Pa_s=2e4", "--target", "viscosity_Pa_s@1=:7e3", "--vary", "B"]
    words += ["--members", "20", "--gpc-error", "5%", "--quiet"]
    run = CliRunner().invoke(main, words)
    assert run.exit_code == 0, run.output
    d = json.loads(run.stdout)
    assert [t["component"] for t in d["targets"]] == ["B", "B"]
    assert d["targets"][1]["range"] == {"low": None, "high": 7000.0}
    assert d["central_model"]["band_gpc"]["relative"] == 0.05
    assert CliRunner().invoke(main, [*words, "--target", "eta0=1:2"]).exit_code == 2
    unknown = CliRunner().invoke(main, [*words, "--vary", "X"])
    assert isinstance(unknown.exception, InputError)


def test_what_the_sweeps_do_not_reach_is_no_answer():
    """Compared with the blend's own values: no melt flow rate of the map where it has none."""
    rng = np.random.default_rng(5)
    model = Model("reptation", 2.0)
    high = np.geomspace(3.0, 300.0, 21)
    parts = [Component(d.label, None, sweep(d, model, rng, omega=high)) for d in (A, B)]
    r = blend(
        parts, [0.2, 0.8], HDPE, members=20, target=["MFR_g_per_10min@2.16=0.3", "eta0_Pa_s=2e4"]
    )
    assert r.outputs.values["MFR_g_per_10min@2.16"] is None
    m = r.map
    at = int(np.argmin(np.abs(m.first - 0.2)))
    assert np.isnan(m.values["MFR_g_per_10min@2.16"][at])
    assert r.targets[0].fractions == ()
    assert "lower bound" in r.targets[1].reason


def test_targets_that_exclude_each_other_read_as_one_sentence():
    """Each with where it is met, in the middle of a sentence (derived); no key in words."""
    none = blend([A, B], None, HDPE, target=["eta0_Pa_s=1e4", "viscosity_Pa_s@1=2e4:"], members=0)
    assert none.all_met is not None and not none.all_met.fractions
    said = none.all_met.reason
    assert said.startswith("None meets all: a zero-shear viscosity") and "; a viscosity at" in said
    far = blend([A, B], None, HDPE, target="viscosity_Pa_s@1e9=1", members=0)
    assert "viscosity_Pa_s@" not in far.answer()
