"""A real blend's page: the slider against the tool's own prediction at the other fraction."""

from __future__ import annotations

import re

import numpy as np
import pytest

from mwdlink.chains.families import lognormal
from mwdlink.chains.polymer import builtin
from mwdlink.decisions.blend import blend
from mwdlink.figures import figures_for
from mwdlink.report import render

pytestmark = pytest.mark.browser


@pytest.fixture(scope="module", params=[2.0, 2.3])
def predicted(request):
    """Two invented grades blended 70/30 and, for the comparison, 40/60."""
    parts = [lognormal(9e4, 3.0, points=40), lognormal(2.6e5, 4.0, points=40)]
    polymer = builtin("hdpe")
    omega = np.logspace(-2, 2, 13)

    def at(phi):
        return blend(
            parts,
            [phi, 1 - phi],
            polymer,
            exponent=request.param,
            omega=omega,
            members=6,
        )

    return request.param, at(0.7), at(0.4)


def test_slider_agrees_with_the_prediction(chromium, predicted, tmp_path):
    """Exponent 2: three stored curves, exact to the figures shown; else the stored grid, to 1 %."""
    exponent, started, wanted = predicted
    data = started.live_data()
    assert data["mode"] == ("quadratic" if exponent == 2.0 else "grid")
    pictures = {k: p for k, p in figures_for(started).items() if k == "fractions"}
    path = tmp_path / "report.html"
    path.write_text(
        render(started, {"command": "blend", **started.to_dict()}, pictures), encoding="utf-8"
    )
    chromium.open(path)
    chromium.run(
        "(() => { const s = document.getElementById('live-slider'); s.value = 40;"
        " s.dispatchEvent(new Event('input')); })()"
    )
    assert chromium.complaints() == [] and chromium.requests() == []
    sweep = wanted.tables()["sweep.csv"]
    for part, header in (("storage", "G' [Pa]"), ("loss", "G'' [Pa]")):
        d = chromium.run(
            f"document.querySelector('#live-moduli [data-part={part}]').getAttribute('d')"
        )
        y = np.array([float(p.split()[1]) for p in re.findall(r"[ML]([\d.]+ [\d.-]+)", d)])
        logs = np.log10(sweep[header].to_numpy())
        if part == "storage":
            # the chart's own scale, from its labelled decades
            ticks = chromium.run(
                "[...document.querySelectorAll('#live-moduli text[text-anchor=end]')].map("
                "t => [t.textContent, +t.getAttribute('y') - 4])"
            )
            digits = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁻", "0123456789-")
            known = [(int(t[2:].translate(digits)), v) for t, v in ticks if t.startswith("10")]
            slope, offset = np.polyfit([k for k, _ in known], [v for _, v in known], 1)
        assert np.abs((y - offset) / slope - logs).max() < (0.004 if exponent == 2.0 else 0.008)
    rows = chromium.run(
        "Object.fromEntries([...document.querySelectorAll('#live-table tbody tr')].map("
        "r => [r.dataset.key, r.querySelector('[data-role=value]').textContent]))"
    )
    eta0 = wanted.to_dict()["terminal"]["eta0_Pa_s"]
    shown = float(rows["eta0_Pa_s"].replace("\u202f", "").split("×")[0])
    shown *= 10.0 ** int(rows["eta0_Pa_s"].partition("×10")[2].translate(digits) or 0)
    assert shown == pytest.approx(eta0, rel=6e-3)
