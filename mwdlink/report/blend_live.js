(function () {
  "use strict";
  var D = JSON.parse(document.getElementById("live-data").textContent);
  var NS = "http://www.w3.org/2000/svg";
  var slider = document.getElementById("live-slider");
  var box = document.getElementById("live-number");
  var log = Math.log;

  /* ---- numbers ---------------------------------------------------------------------- */

  function superscript(n) {
    return String(n).replace(/-/, "\u207b").replace(/\d/g, function (d) {
      return "\u2070\u00b9\u00b2\u00b3\u2074\u2075\u2076\u2077\u2078\u2079"[+d];
    });
  }

  function said(x) {
    if (x === null || !isFinite(x)) { return "\u2013"; }
    if (x === 0) { return "0"; }
    var sign = x < 0 ? "\u2212" : "";
    var parts = Math.abs(x).toExponential(2).split("e");
    var e = +parts[1];
    if (e >= -3 && e < 5) {
      var rounded = +(parts[0] + "e" + e);
      if (e >= 2) {
        var whole = rounded.toFixed(0);
        return sign + (whole.length > 4 ? whole.slice(0, -3) + "\u202f" + whole.slice(-3) : whole);
      }
      return sign + rounded.toFixed(2 - e);
    }
    return sign + parts[0] + "\u00d710" + superscript(e);
  }

  /* position of x among ascending xs: index on the left and the share of the way to the next */
  function place(xs, x) {
    var i = 0;
    while (i < xs.length - 2 && x > xs[i + 1]) { i += 1; }
    if (xs.length < 2) { return [0, 0]; }
    return [i, Math.min(1, Math.max(0, (x - xs[i]) / (xs[i + 1] - xs[i])))];
  }

  function between(a, b, u) {
    if (u === 0) { return a; }
    if (u === 1) { return b; }
    return a > 0 && b > 0 ? Math.exp((1 - u) * log(a) + u * log(b)) : (1 - u) * a + u * b;
  }

  function over(xs, ys, x) {
    var p = place(xs, x);
    return between(ys[p[0]], ys.length > 1 ? ys[p[0] + 1] : ys[0], p[1]);
  }

  function mixed(t, p) {
    var q = 1 - p;
    return p * p * t.first + q * q * t.second + 2 * p * q * t.cross;
  }

  /* ---- the blend -------------------------------------------------------------------- */

  function curve(part, p) {
    var c = D.curves;
    if (D.mode === "quadratic") {
      return D.omega.map(function (_, i) {
        return mixed({ first: c.first[part][i], second: c.second[part][i], cross: c.cross[part][i] }, p);
      });
    }
    var at = place(c.fraction, p);
    return D.omega.map(function (_, i) {
      return between(c[part][at[0]][i], c[part][at[0] + 1][i], at[1]);
    });
  }

  function factors(part, end, p) {
    var b = D.band && D.band[part];
    if (!b) { return null; }
    var f = D.band.fraction;
    if (f.length === 1) { return b[end][0]; }
    var at = place(f, p);
    return D.omega.map(function (_, i) { return between(b[end][at[0]][i], b[end][at[0] + 1][i], at[1]); });
  }

  function blend(p) {
    var s = curve("storage", p), l = curve("loss", p);
    return {
      storage: s,
      loss: l,
      viscosity: s.map(function (v, i) { return Math.sqrt(v * v + l[i] * l[i]) / D.omega[i]; })
    };
  }

  function atOmega(ys, omega) {
    return over(D.omega.map(log), ys, log(omega));
  }

  function crossover(b) {
    for (var i = D.omega.length - 2; i >= 0; i -= 1) {
      var u = log(b.storage[i] / b.loss[i]), v = log(b.storage[i + 1] / b.loss[i + 1]);
      if (u < 0 && v >= 0) {
        var t = u / (u - v);
        return { omega: between(D.omega[i], D.omega[i + 1], t), G: between(b.storage[i], b.storage[i + 1], t) };
      }
    }
    return null;
  }

  function property(q, p, b) {
    var x = null, low = null, high = null, kind = q.kind || "grid", meet;
    if (kind === "grid") {
      x = over(q.fraction, q.value, p);
      if (q.low && q.high) { low = over(q.fraction, q.low, p); high = over(q.fraction, q.high, p); }
    } else if (kind === "quadratic") {
      x = mixed(q, p);
    } else if (kind === "compliance") {
      x = mixed(q, p) / Math.pow(mixed(q.eta0, p), 2);
    } else if (kind === "crossover_omega" || kind === "crossover_G") {
      meet = crossover(b);
      x = meet ? (kind === "crossover_G" ? meet.G : meet.omega) : null;
    } else if (kind === "tan_delta") {
      x = atOmega(b.loss, q.omega) / atOmega(b.storage, q.omega);
    } else {
      x = atOmega(b[kind], q.omega);
    }
    if (x !== null && q.band) {
      low = x * over(q.band.fraction, q.band.low, p);
      high = x * over(q.band.fraction, q.band.high, p);
    }
    return { value: x, low: low, high: high };
  }

  /* ---- drawing ---------------------------------------------------------------------- */

  var W = 420, H = 330, L = 62, R = 12, T = 26, B = 46;

  /* height of a chart on which a decade is as long upwards as it is across */
  function height(xSpan, ySpan) {
    var across = log(xSpan[1] / xSpan[0]), up = log(ySpan[1] / ySpan[0]);
    return Math.round((W - L - R) * up / across + T + B);
  }

  function resize(svg, h) {
    H = h;
    svg.setAttribute("viewBox", "0 0 " + W + " " + h);
  }

  function add(parent, name, attributes, text) {
    var e = document.createElementNS(NS, name);
    Object.keys(attributes).forEach(function (k) { e.setAttribute(k, attributes[k]); });
    if (text !== undefined) { e.textContent = text; }
    parent.appendChild(e);
    return e;
  }

  function scale(low, high, from, to, logarithmic) {
    var a = logarithmic ? log(low) : low, b = logarithmic ? log(high) : high;
    return function (v) { return from + ((logarithmic ? log(v) : v) - a) / (b - a) * (to - from); };
  }

  function decades(low, high, room) {
    var first = Math.ceil(log(low) / Math.LN10 - 1e-9), last = Math.floor(log(high) / Math.LN10 + 1e-9);
    var step = Math.max(1, Math.ceil((last - first + 1) / room)), out = [];
    for (var e = first; e <= last; e += 1) { out.push({ at: Math.pow(10, e), text: e % step === 0 ? "10" + superscript(e) : "" }); }
    if (out.length < 2) {
      out = [];
      for (e = first - 1; e <= last + 1; e += 1) {
        [1, 2, 3, 5].forEach(function (m) {
          var v = m * Math.pow(10, e);
          if (v >= low && v <= high) { out.push({ at: v, text: e >= -2 && e < 4 ? String(+v.toPrecision(2)) : m + "\u00d710" + superscript(e) }); }
        });
      }
    }
    return out;
  }

  function frame(svg, x, y, xTicks, yTicks, xLabel, yLabel) {
    while (svg.firstChild) { svg.removeChild(svg.firstChild); }
    add(svg, "rect", { x: L, y: T, width: W - L - R, height: H - T - B, "class": "axis" });
    xTicks.forEach(function (t) {
      add(svg, "path", { d: "M" + x(t.at).toFixed(1) + " " + (H - B) + "v-5", "class": "axis" });
      if (t.text) { add(svg, "text", { x: x(t.at).toFixed(1), y: H - B + 15, "text-anchor": "middle" }, t.text); }
    });
    yTicks.forEach(function (t) {
      add(svg, "path", { d: "M" + L + " " + y(t.at).toFixed(1) + "h5", "class": "axis" });
      if (t.text) { add(svg, "text", { x: L - 5, y: (y(t.at) + 4).toFixed(1), "text-anchor": "end" }, t.text); }
    });
    add(svg, "text", { x: (L + W - R) / 2, y: H - 10, "text-anchor": "middle" }, xLabel);
    add(svg, "text", { x: 13, y: (T + H - B) / 2, "text-anchor": "middle",
      transform: "rotate(-90 13 " + (T + H - B) / 2 + ")" }, yLabel);
    var id = svg.id + "-clip";
    var clip = add(svg, "clipPath", { id: id });
    add(clip, "rect", { x: L, y: T, width: W - L - R, height: H - T - B });
    return add(svg, "g", { "clip-path": "url(#" + id + ")" });
  }

  function path(xs, ys, x, y) {
    var d = "", pen = "M";
    xs.forEach(function (v, i) {
      if (!(ys[i] > 0) || !isFinite(ys[i])) { pen = "M"; return; }
      d += pen + x(v).toFixed(1) + " " + y(ys[i]).toFixed(1);
      pen = "L";
    });
    return d;
  }

  function area(xs, low, high, x, y) {
    var there = path(xs, high, x, y), back = path(xs.slice().reverse(), low.slice().reverse(), x, y);
    return there + back.replace("M", "L") + "Z";
  }

  function times(ys, f) { return ys.map(function (v, i) { return v * f[i]; }); }

  function legend(svg, entries) {
    var at = L;
    entries.forEach(function (e) {
      add(svg, "path", { d: "M" + at + " 14h22", "class": e[1] });
      var t = add(svg, "text", { x: at + 27, y: 18 }, e[0]);
      at += 27 + (t.getComputedTextLength ? t.getComputedTextLength() : 7 * e[0].length) + 14;
    });
  }

  function span(lists, most) {
    var low = Infinity, high = 0;
    lists.forEach(function (l) { l.forEach(function (v) { if (v > 0 && isFinite(v)) { low = Math.min(low, v); high = Math.max(high, v); } }); });
    low = Math.max(low, high / Math.pow(10, most));
    var pad = Math.pow(high / low, 0.04) * 1.05;
    return [low / pad, high * pad];
  }

  /* at least as many decades upwards as asked for, and not more than a page can hold */
  function within(s, least, most) {
    var d = log(s[1] / s[0]) / Math.LN10, aside = Math.pow(10, Math.max(0, least - d) / 2);
    return [Math.max(s[0] / aside, s[1] / Math.pow(10, most)), s[1] * aside];
  }

  /* limits are set once, from both ends, so that the eye sees the curves move and not the axes */
  var ends = [blend(0), blend(1)];
  var omegaSpan = [D.omega[0], D.omega[D.omega.length - 1]];
  var across = log(omegaSpan[1] / omegaSpan[0]) / Math.LN10;
  var moduliSpan = within(span([ends[0].storage, ends[0].loss, ends[1].storage, ends[1].loss], 12), 0.6 * across, 1.4 * across);
  var etaSpan = within(span([ends[0].viscosity, ends[1].viscosity], 12), 0.6 * across, 1.4 * across);

  function drawCurves(svg, b, p, parts, ySpan, xLabel, yLabel, entries) {
    resize(svg, height(omegaSpan, ySpan));
    var x = scale(omegaSpan[0], omegaSpan[1], L, W - R, true), y = scale(ySpan[0], ySpan[1], H - B, T, true);
    var g = frame(svg, x, y, decades(omegaSpan[0], omegaSpan[1], 9), decades(ySpan[0], ySpan[1], 10), xLabel, yLabel);
    parts.forEach(function (part, i) {
      var low = factors(part, "low", p), high = factors(part, "high", p);
      if (low && high) { add(g, "path", { d: area(D.omega, times(b[part], low), times(b[part], high), x, y), "class": "band" + (i + 1) }); }
      ends.forEach(function (e) { add(g, "path", { d: path(D.omega, e[part], x, y), "class": "thin" }); });
      add(g, "path", { d: path(D.omega, b[part], x, y), "class": "line " + (i ? "second" : "first"), "data-part": part });
    });
    legend(svg, entries);
  }

  var target = D.target || null;
  var shown = D.properties.filter(function (q) { return target && q.key === target.key; })[0] || D.properties[0] || null;
  var course = null;
  if (shown) {
    course = { p: [], value: [], low: [], high: [] };
    for (var k = 0; k <= 100; k += 1) {
      var one = property(shown, k / 100, blend(k / 100));
      course.p.push(k);
      ["value", "low", "high"].forEach(function (n) { course[n].push(one[n]); });
    }
  }

  function drawProperty(svg, p, now) {
    resize(svg, 330);
    var all = [course.value, course.low, course.high];
    var wanted = target && shown.key === target.key ? target.wanted : null;
    if (wanted !== null) { all.push([wanted]); }
    var s = span(all.map(function (l) { return l.filter(function (v) { return v !== null; }); }), 12);
    var x = scale(0, 100, L, W - R, false), y = scale(s[0], s[1], H - B, T, true);
    var ticks = [0, 20, 40, 60, 80, 100].map(function (v) { return { at: v, text: String(v) }; });
    var g = frame(svg, x, y, ticks, decades(s[0], s[1], 9), "fraction of " + D.components[0] + " / wt%",
      shown.label + (shown.unit ? " / " + shown.unit : ""));
    if (course.low[0] !== null && course.high[0] !== null) {
      add(g, "path", { d: area(course.p, course.low, course.high, x, y), "class": "band1" });
    }
    add(g, "path", { d: path(course.p, course.value, x, y), "class": "line first" });
    var entries = [["prediction", "line first"]];
    if (wanted !== null) {
      add(g, "path", { d: "M" + L + " " + y(wanted).toFixed(1) + "H" + (W - R), "class": "aim" });
      entries.push(["target " + said(wanted), "aim"]);
    }
    add(g, "path", { d: "M" + x(100 * p).toFixed(1) + " " + T + "V" + (H - B), "class": "upright" });
    if (now && now.value > 0) { add(g, "circle", { cx: x(100 * p).toFixed(1), cy: y(now.value).toFixed(1), r: 5, "class": "here" }); }
    entries.push(["chosen", "upright"]);
    legend(svg, entries);
  }

  function cell(row, role, text) {
    row.querySelector('[data-role="' + role + '"]').textContent = text;
  }

  function draw(percent) {
    var p = percent / 100, b = blend(p), now = null;
    drawCurves(document.getElementById("live-moduli"), b, p, ["storage", "loss"], moduliSpan,
      "angular frequency \u03c9 / rad s\u207b\u00b9", "G\u2032, G\u2033 / Pa",
      [["G\u2032", "line first"], ["G\u2033", "line second"], ["components", "thin"]]);
    drawCurves(document.getElementById("live-flow"), b, p, ["viscosity"], etaSpan,
      "rate / s\u207b\u00b9", "viscosity / Pa s", [["blend", "line first"], ["components", "thin"]]);
    var words = [];
    D.properties.forEach(function (q, i) {
      var r = property(q, p, b), row = document.querySelectorAll("#live-table tbody tr")[i];
      cell(row, "value", said(r.value));
      cell(row, "interval", r.low !== null && r.high !== null ? said(r.low) + " to " + said(r.high) : "\u2013");
      if (q === shown) {
        now = r;
        words.push(q.label + " " + said(r.value) + (q.unit ? " " + q.unit : ""));
      }
      if (target && q.key === target.key) {
        cell(row, "target", said(target.wanted));
        if (r.low !== null && r.high !== null) {
          words.push(target.wanted < r.low ? "above the target" : target.wanted > r.high ? "below the target" : "the target lies within the interval");
        } else if (r.value !== null) {
          words.push(r.value >= target.wanted ? "at or above the target" : "below the target");
        }
      }
    });
    if (shown) { drawProperty(document.getElementById("live-property"), p, now); }
    document.getElementById("live-said").textContent =
      "At " + (+percent.toFixed(1)) + " wt% " + D.components[0] + (words.length ? ": " + words.join(", ") + "." : ".");
  }

  function set(percent, from) {
    if (!isFinite(percent)) { return; }
    percent = Math.min(100, Math.max(0, percent));
    if (from !== slider) { slider.value = percent; }
    if (from !== box) { box.value = +percent.toFixed(1); }
    slider.setAttribute("aria-valuetext", (+percent.toFixed(1)) + " wt%");
    draw(percent);
  }

  slider.addEventListener("input", function () { set(+slider.value, slider); });
  box.addEventListener("input", function () { if (box.value !== "") { set(+box.value, box); } });
  box.addEventListener("change", function () { set(box.value === "" ? +slider.value : +box.value, null); });
  document.getElementById("live-reset").addEventListener("click", function () { set(100 * D.fraction, null); });
  document.getElementById("live").hidden = false;
  set(100 * D.fraction, null);
}());
