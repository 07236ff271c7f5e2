"""The live part of a blend's page: a slider for the fraction, three charts, a property table.

A blend result offers `live_data()`, a mapping of JSON types (arrays may be numpy), or None:

```
{
  "mode": "quadratic" | "grid",
  "components": ["A", "B"],           # two; the fraction is the first one's, by weight
  "fraction": 0.7,                    # where the slider starts, 0 to 1
  "omega": [...],                     # n frequencies, rad/s, ascending
  "curves": {...},                    # see below
  "band": {...},                      # optional: the trust band of the curves
  "properties": [ {...}, ... ],       # rows of the table, see below
  "target": {"key": ..., "wanted": x, "fractions": [0.55]},     # optional
}
```

`curves` in mode *quadratic* (mixing exponent 2; exact for every fraction): `first`, `second` and
`cross`, each `{"storage": [n], "loss": [n]}` in Pa, and the blend is
`phi^2 first + (1 - phi)^2 second + 2 phi (1 - phi) cross`. In mode *grid*: `fraction` (m,
ascending, 0 to 1), `storage` and `loss` (m lists of n), interpolated over the fraction in their
logarithms.

`band`: `fraction` (k, ascending), and `storage`, `loss`, `viscosity`, each `{"low": [k lists of n],
"high": [k lists of n]}`: factors on the central curve (0.9 and 1.1, say). A part may be absent.

A property has `key`, `label`, `unit` and a `kind`:

- `"grid"` (the default): `fraction` (k), `value` (k), and `low`, `high` (k) where known;
  `at_least` true where the values are lower bounds;
- `"quadratic"`: `first`, `second`, `cross`, as for the curves (eta0 for exponent 2);
- `"compliance"`: `first`, `second`, `cross` of lim G'/omega^2 and `eta0`, a mapping of the same
  three of eta0: Je0 is the one over the square of the other;
- `"viscosity"`, `"tan_delta"`, `"storage"`, `"loss"` with `omega`: read off the blend's curves,
  interpolated in their logarithms;
- `"crossover_omega"`, `"crossover_G"`: where G' and G'' of the blend's curves meet.

Any kind but `grid` may carry its interval as factors: `band` = `{"fraction": [k], "low": [k],
"high": [k]}`. The target's `key` names the property drawn against the fraction, with its band and
the target's line; without a target it is the first property.

The script is plain and inline; its hash in the page's policy is the only script allowed. Without
script the section stays hidden and the static pictures say the same for the fraction asked for.
"""

from __future__ import annotations

import base64
import hashlib
import json
from collections.abc import Mapping
from functools import cache
from html import escape
from importlib.resources import files
from typing import Any

import numpy as np

from mwdlink.errors import ModelError
from mwdlink.figures.blend import property_words
from mwdlink.figures.words import short, upper_first
from mwdlink.quantity import to_plain

KINDS = (
    "grid", "quadratic", "compliance", "viscosity", "tan_delta", "storage", "loss",
    "crossover_omega", "crossover_G",
)  # fmt: skip


@cache
def script() -> str:
    """The script's text."""
    return files("mwdlink.report").joinpath("blend_live.js").read_text(encoding="utf-8")


@cache
def script_hash() -> str:
    """The script's hash as a content security policy wants it."""
    digest = hashlib.sha256(script().encode("utf-8")).digest()
    return f"'sha256-{base64.b64encode(digest).decode()}'"


def _array(data: Mapping[str, Any], key: str, shape: tuple[int, ...], where: str) -> np.ndarray:
    try:
        a = np.asarray(data[key], dtype=float)
    except KeyError:
        raise ModelError(f"live data: {where} lacks {key!r}") from None
    except (TypeError, ValueError):
        raise ModelError(f"live data: {where} {key!r} is not an array of numbers") from None
    if a.shape != shape:
        raise ModelError(f"live data: {where} {key!r} has shape {a.shape}, not {shape}")
    if not np.isfinite(a).all():
        raise ModelError(f"live data: {where} {key!r} is not finite everywhere")
    return a


def check(data: Mapping[str, Any]) -> dict[str, Any]:
    """Live data in JSON types, refused where it is not as documented.

    Raises
    ------
    ModelError
        Naming what is missing or of the wrong shape.
    """
    if data.get("mode") not in {"quadratic", "grid"}:
        raise ModelError("live data: mode is neither 'quadratic' nor 'grid'")
    if len(data.get("components") or ()) != 2:
        raise ModelError("live data: two components are needed")
    if not 0.0 <= float(data.get("fraction", 0.5)) <= 1.0:
        raise ModelError("live data: the fraction is not within 0 to 1")
    omega = np.asarray(data.get("omega", ()), dtype=float)
    if omega.ndim != 1 or omega.size < 2 or not (np.diff(omega) > 0).all() or not omega[0] > 0:
        raise ModelError("live data: omega is not an ascending list of positive frequencies")
    n = (omega.size,)
    curves = data.get("curves") or {}
    if data["mode"] == "quadratic":
        for name in ("first", "second", "cross"):
            for part in ("storage", "loss"):
                _array(curves.get(name) or {}, part, n, f"curves {name}")
    else:
        phi = np.asarray(curves.get("fraction", ()), dtype=float)
        if phi.size < 2 or not (np.diff(phi) > 0).all():
            raise ModelError("live data: the grid's fractions are not ascending")
        for part in ("storage", "loss"):
            _array(curves, part, (phi.size, *n), "curves")
    band = data.get("band")
    if band:
        k = (len(band.get("fraction") or ()),)
        for part in ("storage", "loss", "viscosity"):
            if part in band:
                for end in ("low", "high"):
                    _array(band[part], end, k + n, f"band {part}")
    for p in data.get("properties") or ():
        kind = p.get("kind", "grid")
        if kind not in KINDS:
            raise ModelError(f"live data: property {p.get('key')!r} has the unknown kind {kind!r}")
        if kind == "grid":
            k = (len(p.get("fraction") or ()),)
            for part in (
                "fraction",
                "value",
                *(e for e in ("low", "high") if p.get(e) is not None),
            ):
                _array(p, part, k, f"property {p.get('key')!r}")
        if kind in {"quadratic", "compliance"}:
            for part in ("first", "second", "cross"):
                _array(p, part, (), f"property {p.get('key')!r}")
    plain = to_plain(data)
    plain.setdefault("fraction", 0.5)
    plain.setdefault("properties", [])
    for p in plain["properties"]:
        p["label"] = property_words(str(p.get("label", p.get("key"))))
        if p.get("at_least"):
            p["label"] += ", at least"
    return plain  # type: ignore[no-any-return]


def data_block(data: Mapping[str, Any]) -> str:
    """The data as a block a script can read and no browser runs."""
    text = json.dumps(_shortened(data), ensure_ascii=False, separators=(",", ":"), allow_nan=False)
    # no markup may end or open inside the block
    for mark, code in (
        ("<", "\\u003c"),
        (">", "\\u003e"),
        ("&", "\\u0026"),
        ("\u2028", "\\u2028"),
        ("\u2029", "\\u2029"),
    ):
        text = text.replace(mark, code)
    return f'<script type="application/json" id="live-data">{text}</script>'


def _shortened(x: Any) -> Any:
    """Floats to nine figures: more than any chart or table can show, at half the size."""
    if isinstance(x, float):
        return float(f"{x:.9g}")
    if isinstance(x, Mapping):
        return {k: _shortened(v) for k, v in x.items()}
    if isinstance(x, (list, tuple)):
        return [_shortened(v) for v in x]
    return x


def _chart(name: str, label: str) -> str:
    return (
        f'<figure><svg class="chart" id="live-{name}" viewBox="0 0 420 330" role="img" '
        f'aria-label="{escape(label)}"></svg><figcaption>{escape(label)}.</figcaption></figure>'
    )


def section(data: Mapping[str, Any]) -> str:
    """The section with slider, charts and table; hidden until its script runs."""
    first = escape(str(data["components"][0]))
    start = short(100.0 * float(data["fraction"]))
    aimed = (data.get("target") or {}).get("key")
    properties = data.get("properties") or []
    shown = next(
        (p for p in properties if p.get("key") == aimed), properties[0] if properties else None
    )
    rows = "".join(
        f'<tr data-key="{escape(str(p.get("key")))}">'
        f'<th scope="row">{escape(str(p.get("label", p.get("key"))))}'
        f"{'' if not p.get('unit') else ' / ' + escape(str(p['unit']))}</th>"
        '<td class="n" data-role="value">–</td><td class="n" data-role="interval">–</td>'
        '<td class="n" data-role="target">–</td></tr>'
        for p in properties
    )
    charts = _chart(
        "moduli", "Storage and loss modulus of the blend; thin lines are the components"
    )
    charts += _chart("flow", "Viscosity against rate, taken from the complex viscosity (Cox-Merz)")
    if shown is not None:
        charts += _chart(
            "property", upper_first(f"{shown.get('label', shown.get('key'))} against the fraction")
        )
    exact = (
        "Every fraction is computed exactly from three stored curves (mixing exponent 2)."
        if data["mode"] == "quadratic"
        else "Fractions between the stored ones are interpolated."
    )
    return f"""<section id="live" hidden aria-labelledby="live-h">
<h2 id="live-h">Try another fraction</h2>
<div class="controls">
<label for="live-slider">Fraction of {first} / wt%</label>
<input id="live-slider" type="range" min="0" max="100" step="0.5" value="{start}">
<input id="live-number" type="number" min="0" max="100" step="0.1" value="{start}"
aria-label="Fraction of {first} in weight percent">
<button id="live-reset" type="button">Back to {start} %</button>
</div>
<p id="live-said" role="status"></p>
<div class="figures">{charts}</div>
<div class="scroll" tabindex="0" role="region" aria-label="Properties at this fraction">
<table id="live-table"><caption>Properties at this fraction</caption>
<thead><tr><th scope="col">Property</th><th scope="col" class="n">Value</th>
<th scope="col" class="n">Interval</th><th scope="col" class="n">Target</th></tr></thead>
<tbody>{rows}</tbody></table></div>
<p class="small">{exact} Bands are the trust band of the prediction.</p>
</section>"""
