"""The page in a real browser: quiet, still, readable, and the slider says the right numbers."""

from __future__ import annotations

import re

import numpy as np
import pytest

pytestmark = pytest.mark.browser


@pytest.fixture(scope="module")
def files(page_of, tmp_path_factory):
    folder = tmp_path_factory.mktemp("pages")
    out = {}
    for name in ("invert", "live", "grid"):
        out[name] = folder / f"{name}.html"
        out[name].write_text(page_of(name), encoding="utf-8")
    return out


@pytest.mark.parametrize("name", ["invert", "live"])
def test_no_complaint_and_no_request(chromium, files, name):
    """Stated rule: no console error, no network request, from a file on disk."""
    chromium.open(files[name])
    chromium.run("new Promise(r => setTimeout(r, 150))")
    assert chromium.complaints() == []
    assert chromium.requests() == []


def test_a_foreign_script_is_refused(chromium, page_of, tmp_path):
    """The policy at work: a script that is not the page's own does not run and is reported."""
    page = page_of("live").replace("</body>", "<script>window.broken = 1</script></body>")
    path = tmp_path / "foreign.html"
    path.write_text(page, encoding="utf-8")
    chromium.open(path)
    assert chromium.run("typeof window.broken") == "undefined"
    assert chromium.run("document.getElementById('live').hidden") is False
    assert any("Content Security Policy" in c for c in chromium.complaints())


@pytest.mark.parametrize("name", ["invert", "live"])
def test_narrow_screens_do_not_scroll_sideways(chromium, files, name):
    """Stated rule: 390 px; wide tables scroll in regions of their own that take the focus."""
    chromium.open(files[name], width=390, height=800)
    assert chromium.run("document.documentElement.scrollWidth") <= 390
    chromium.run("document.querySelectorAll('details').forEach(d => d.open = true)")
    assert chromium.run("document.documentElement.scrollWidth") <= 390
    assert chromium.run(
        "[...document.querySelectorAll('.scroll')].some(e => e.scrollWidth > e.clientWidth)"
    )
    # letters in the figures stay readable: at least 9 px high on a phone
    small = chromium.run(
        "Math.min(...[...document.querySelectorAll('figure svg text')].map(t => {"
        " const m = t.getScreenCTM(); "
        "return parseFloat(getComputedStyle(t).fontSize) * Math.hypot(m.a, m.b); }))"
    )
    assert small >= 8.0


CONTRAST = """
(() => {
  const lum = c => { const v = c.map(x => { x /= 255;
    return x <= 0.04045 ? x / 12.92 : Math.pow((x + 0.055) / 1.055, 2.4); });
    return 0.2126 * v[0] + 0.7152 * v[1] + 0.0722 * v[2]; };
  const rgb = s => { const m = s.match(/[\\d.]+/g).map(Number);
    return m.length > 3 && m[3] === 0 ? null : m.slice(0, 3); };
  const ground = e => { for (let n = e; n; n = n.parentElement) {
      const c = rgb(getComputedStyle(n).backgroundColor); if (c) return c; }
    return [255, 255, 255]; };
  const bad = [];
  const walk = document.createTreeWalker(document.body, NodeFilter.SHOW_TEXT);
  while (walk.nextNode()) {
    const e = walk.currentNode.parentElement;
    if (!walk.currentNode.textContent.trim()) continue;
    if (['SCRIPT', 'STYLE', 'title', 'desc'].includes(e.tagName)) continue;
    const style = getComputedStyle(e);
    const inside = e.closest('svg');
    const color = rgb(inside ? style.fill : style.color);
    if (!color) continue;
    const a = lum(color), b = lum(ground(inside ? inside.parentElement : e));
    const ratio = (Math.max(a, b) + 0.05) / (Math.min(a, b) + 0.05);
    if (ratio < 4.5) bad.push([e.textContent.slice(0, 40), ratio]);
  }
  return bad;
})()
"""
NAMES = """
(() => {
  const bad = [];
  const label = e => e.getAttribute('aria-label') ||
    (e.getAttribute('aria-labelledby') || '').split(' ')
    .map(i => (document.getElementById(i) || {}).textContent || '').join(' ').trim() ||
    (e.labels && e.labels.length ? e.labels[0].textContent : '') || e.textContent.trim();
  const all = 'a, button, input, summary, [role=img], [role=region], section, table';
  document.querySelectorAll(all).forEach(e => {
    const name = e.tagName === 'TABLE'
      ? (e.caption || e.closest('[aria-label]') || e).textContent : label(e);
    if (!String(name).trim()) bad.push(e.outerHTML.slice(0, 80));
  });
  return bad;
})()
"""


@pytest.mark.parametrize("dark", [False, True])
@pytest.mark.parametrize("name", ["invert", "live"])
def test_contrast_and_names(chromium, files, name, dark):
    """Published rule (WCAG 2.1 AA): text 4.5 to 1 in both themes, figures too; all have names."""
    chromium.open(files[name], dark=dark)
    chromium.run("document.querySelectorAll('details').forEach(d => d.open = true)")
    assert chromium.run(CONTRAST) == []
    assert chromium.run(NAMES) == []
    ground = chromium.run("getComputedStyle(document.body).backgroundColor")
    assert (sum(map(int, re.findall(r"\d+", ground)[:3])) < 200) is dark


def test_keyboard_reaches_everything(chromium, files):
    """Common practice: skip link first; slider moves by arrow keys; the focus can be seen."""
    chromium.open(files["live"])

    def press(key: str, code: int) -> None:
        for kind in ("rawKeyDown", "keyUp"):
            chromium.call(
                "Input.dispatchKeyEvent", type=kind, key=key, code=key, windowsVirtualKeyCode=code
            )

    press("Tab", 9)
    assert chromium.run("document.activeElement.className") == "skip"
    assert chromium.run("document.activeElement.getBoundingClientRect().left") >= 0
    press("Tab", 9)
    assert chromium.run("document.activeElement.id") == "live-slider"
    assert chromium.run("getComputedStyle(document.activeElement).outlineStyle") == "solid"
    before = chromium.run("document.getElementById('live-number').value")
    press("ArrowRight", 39)
    assert (
        float(chromium.run("document.getElementById('live-number').value")) == float(before) + 0.5
    )


def parsed(text: str) -> float:
    """A number as the page writes it."""
    digits = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁻−", "0123456789--")
    text = text.replace("\u202f", "").translate(digits)
    mantissa, _, power = text.partition("×10")
    return float(mantissa) * 10.0 ** int(power or 0)


def slide(chromium, percent: float) -> dict[str, str]:
    """Move the slider and read the table."""
    chromium.run(
        f"(() => {{ const s = document.getElementById('live-slider'); s.value = {percent}; "
        "s.dispatchEvent(new Event('input')); })()"
    )
    return chromium.run(
        "Object.fromEntries([...document.querySelectorAll('#live-table tbody tr')].map("
        "r => [r.dataset.key, r.querySelector('[data-role=value]').textContent]))"
    )


def expected(data: dict, phi: float) -> tuple[np.ndarray, np.ndarray]:
    """The stated formula: phi^2 first + (1-phi)^2 second + 2 phi (1-phi) cross."""
    c = data["curves"]
    q = 1 - phi
    return tuple(
        phi**2 * np.array(c["first"][k])
        + q**2 * np.array(c["second"][k])
        + 2 * phi * q * np.array(c["cross"][k])
        for k in ("storage", "loss")
    )


@pytest.mark.parametrize("percent", [0.0, 12.5, 50.0, 70.0, 100.0])
def test_slider_says_the_right_numbers(chromium, files, made_up, percent):
    """Compared with the quadratic form in numpy: the property table to the figures shown."""
    data = made_up.live_quadratic()
    chromium.open(files["live"])
    shown = slide(chromium, percent)
    phi = percent / 100
    omega = np.array(data["omega"])
    storage, loss = expected(data, phi)
    at = lambda y: np.exp(np.interp(0.0, np.log(omega), np.log(y)))  # noqa: E731
    cross = np.log(storage / loss)
    want = {
        "eta0_Pa_s": np.interp(
            phi, data["properties"][0]["fraction"], data["properties"][0]["value"]
        ),
        "zero": phi**2 * 9e4 + (1 - phi) ** 2 * 1e3 + 2 * phi * (1 - phi) * 2e4,
        "eta_1": at(np.hypot(storage, loss) / omega),
        "tan_1": at(loss / storage),
    }
    want["Je0_per_Pa"] = (phi**2 * 2.7e5 + (1 - phi) ** 2 * 30 + 2 * phi * (1 - phi) * 6e4) / want[
        "zero"
    ] ** 2
    for key, value in want.items():
        assert parsed(shown[key]) == pytest.approx(value, rel=5.1e-3), key
    if cross[0] < 0 < cross[-1]:
        assert parsed(shown["wc"]) == pytest.approx(
            np.exp(np.interp(0.0, cross, np.log(omega))), rel=5.1e-3
        )
    else:
        assert shown["wc"] == "–"
    said = chromium.run("document.getElementById('live-said').textContent")
    assert said.startswith(f"At {percent:g} wt% A: zero-shear viscosity")


def points(chromium, part: str) -> np.ndarray:
    d = chromium.run(f"document.querySelector('#live-moduli [data-part={part}]').getAttribute('d')")
    return np.array([[float(v) for v in p.split()] for p in re.findall(r"[ML]([\d.]+ [\d.-]+)", d)])


def test_slider_redraws_the_curves(chromium, files, made_up):
    """The drawn path against the quadratic form: same shape on the same log scale; it moves."""
    data = made_up.live_quadratic()
    chromium.open(files["live"])
    slide(chromium, 20)
    first = points(chromium, "storage")
    slide(chromium, 80)
    second = points(chromium, "storage")
    assert first.shape == second.shape and np.abs(first[:, 1] - second[:, 1]).max() > 20
    logs = np.log(np.concatenate([expected(data, 0.2)[0], expected(data, 0.8)[0]]))
    pixels = np.concatenate([first[:, 1], second[:, 1]])
    slope, offset = np.polyfit(logs, pixels, 1)
    assert np.abs(slope * logs + offset - pixels).max() < 0.1
    # a decade has the same length across
    across = np.polyfit(np.log(data["omega"]), first[:, 0], 1)[0]
    assert across == pytest.approx(-slope, rel=2e-2)


def test_number_box_and_reset(chromium, files):
    """Typing a fraction, nonsense, and going back."""
    chromium.open(files["live"])
    typed = (
        "(() => {{ const b = document.getElementById('live-number'); b.value = '{}'; "
        "b.dispatchEvent(new Event('input')); b.dispatchEvent(new Event('change')); "
        "return [b.value, document.getElementById('live-slider').value]; }})()"
    )
    assert chromium.run(typed.format("33.5")) == ["33.5", "33.5"]
    assert chromium.run(typed.format("180")) == ["100", "100"]
    assert chromium.run(typed.format("")) == ["100", "100"]
    chromium.run("document.getElementById('live-reset').click()")
    assert chromium.run("document.getElementById('live-slider').value") == "70"
    assert chromium.complaints() == []


def test_target_in_words(chromium, files):
    """The made-up target 1.5e5 Pa s: below it at 20 %, above at 90 %, within in between."""
    chromium.open(files["live"])
    said = "document.getElementById('live-said').textContent"
    slide(chromium, 20)
    assert "below the target" in chromium.run(said)
    slide(chromium, 90)
    assert "above the target" in chromium.run(said)
    slide(chromium, 58)
    assert "within the interval" in chromium.run(said)


def test_stored_grid_is_interpolated(chromium, files, made_up):
    """Mode grid: at a stored fraction the stored curve itself, between two their log mean."""
    data = made_up.live_grid()
    chromium.open(files["grid"])
    k = int(np.argmin(np.abs(np.log(data["omega"]))))
    loss, storage = (
        np.array(data["curves"]["loss"])[:, k],
        np.array(data["curves"]["storage"])[:, k],
    )
    assert parsed(slide(chromium, 40)["tan_1"]) == pytest.approx(loss[4] / storage[4], rel=5.1e-3)
    middle = np.sqrt(loss[4] * loss[5]) / np.sqrt(storage[4] * storage[5])
    assert parsed(slide(chromium, 45)["tan_1"]) == pytest.approx(middle, rel=5.1e-3)


def test_without_script_the_static_figures_stay(chromium, files):
    """Stated rule: degrades to the static pictures."""
    chromium.open(files["live"], script=False)
    answer = chromium.call("DOM.getDocument", depth=-1)
    chromium.call("DOM.enable")
    found = chromium.call("DOM.querySelector", nodeId=answer["root"]["nodeId"], selector="#live")
    with pytest.raises(RuntimeError, match="box model"):
        chromium.call("DOM.getBoxModel", nodeId=found["nodeId"])
    figure = chromium.call(
        "DOM.querySelector", nodeId=answer["root"]["nodeId"], selector="#fig1 svg"
    )
    assert chromium.call("DOM.getBoxModel", nodeId=figure["nodeId"])["model"]["width"] > 200
    chromium.call("Emulation.setScriptExecutionDisabled", value=False)


A4 = (180, 267)
"""Width and height [mm] of an A4 page less the margins."""


@pytest.mark.parametrize("name", ["invert", "live"])
def test_printed_page_cuts_no_figure(chromium, files, name):
    """Derived: at A4's width every picture with its caption is shorter than a page and may not be
    broken, nothing sticks out sideways, tables behind figures are open, the page is white."""
    mm = 96 / 25.4
    chromium.open(
        files[name], width=round(A4[0] * mm), height=round(A4[1] * mm), media="print", dark=True
    )
    boxes = chromium.run(
        "[...document.querySelectorAll('.whole, #live figure')].map(e => {"
        " const b = e.getBoundingClientRect();"
        " return [b.height, b.left, b.right, getComputedStyle(e).breakInside]; })"
    )
    assert len(boxes) >= 2
    for height, left, right, rule in boxes:
        assert 40 < height < A4[1] * mm and rule == "avoid"
        assert left >= -1 and right <= A4[0] * mm + 1
    assert chromium.run("document.documentElement.scrollWidth") <= round(A4[0] * mm)
    closed = chromium.run(
        "[...document.querySelectorAll('details table')].filter("
        "t => t.getBoundingClientRect().height < 20).length"
    )
    assert closed == 0
    assert chromium.run("getComputedStyle(document.body).backgroundColor") == "rgb(255, 255, 255)"
    pdf = chromium.pdf()
    sizes = {
        tuple(round(float(v)) for v in m.split())
        for m in re.findall(rb"/MediaBox \[([\d. ]+)\]", pdf)
    }
    assert sizes == {(0, 0, 595, 842)}
    pages = len(re.findall(rb"/Type /Page\b", pdf))
    assert 2 <= pages <= 9
