"""The one hand of the pictures: axes, colours, files, against the rules stated in style.py."""

from __future__ import annotations

import struct
import subprocess
import sys

import matplotlib
import numpy as np
import pytest

from mwdlink.figures import style


def luminance(color: str) -> float:
    """Relative luminance after WCAG 2.1 (published)."""
    parts = [int(color[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def contrast(a: str, b: str) -> float:
    high, low = sorted((luminance(a), luminance(b)), reverse=True)
    return (high + 0.05) / (low + 0.05)


def test_colours_stand_out_on_paper():
    """Published rule (WCAG 2.1): 4.5 for text, 3 for graphical objects."""
    assert contrast(style.INK, style.PAPER) >= 4.5
    assert contrast(style.SOFT, style.PAPER) >= 4.5
    for color in style.SERIES:
        assert contrast(color, style.PAPER) >= 3.0


def test_lines_and_points_differ_by_more_than_colour():
    """Common practice: dash and marker say once more what the colour says."""
    n = len(style.SERIES)
    assert len({str(style.series_look(i)["linestyle"]) for i in range(n)}) == n
    assert len({style.data_look(i)["marker"] for i in range(n)}) == n
    looks = [
        (style.series_look(i)["color"], str(style.series_look(i)["linestyle"])) for i in range(20)
    ]
    assert len(set(looks)) == 20


@pytest.mark.parametrize("decades", [0.3, 8, 12, 25])
@pytest.mark.parametrize("which", ["x", "y"])
def test_every_decade_is_ticked(decades, which):
    """Derived: all whole powers of ten within the limits have a major tick, 2 to 9 a minor one."""
    with style.context():
        ax = style.new_axes()
        style.log_axis(ax.xaxis if which == "x" else ax.yaxis)
        low, high = 2.3e-5, 2.3e-5 * 10.0**decades
        (ax.set_xlim if which == "x" else ax.set_ylim)(low, high)
        ax.get_figure().draw_without_rendering()
        axis = ax.xaxis if which == "x" else ax.yaxis
        major = {round(np.log10(t)) for t in axis.get_majorticklocs() if low <= t <= high}
        minor = [t for t in axis.get_minorticklocs() if low <= t <= high]
    wanted = set(range(int(np.ceil(np.log10(low))), int(np.floor(np.log10(high))) + 1))
    assert major == wanted
    inside = [
        m * 10.0**e for e in range(-6, 40) for m in range(2, 10) if low <= m * 10.0**e <= high
    ]
    assert len(minor) == len(inside)


@pytest.mark.parametrize("decades", [0.3, 1.5, 8, 20])
def test_tick_labels_never_touch(decades):
    """Derived: the boxes of neighbouring labels keep apart, and at least one label is left."""
    with style.context():
        ax = style.new_axes()
        style.log_axes(ax)
        ax.set_xlim(3e-7, 3e-7 * 10.0**decades)
        ax.set_ylim(3e-7, 3e-7 * 10.0**decades)
        ax.get_figure().draw_without_rendering()
        for axis in (ax.xaxis, ax.yaxis):
            labels = [t for t in axis.get_ticklabels(which="both") if t.get_text()]
            boxes = sorted((t.get_window_extent() for t in labels), key=lambda b: (b.x0, b.y0))
            boxes = [b for b in boxes if ax.bbox.x0 - 60 < b.x0 < ax.bbox.x1 + 30]
            assert boxes
            for i, a in enumerate(boxes):
                assert not any(a.overlaps(b) for b in boxes[i + 1 :])


def test_decades_have_one_length():
    """Derived: pixels for each decade, across and upwards."""
    with style.context():
        ax = style.new_axes()
        style.log_axes(ax)
        ax.set_xlim(1e-4, 1e4)
        ax.set_ylim(1e-1, 1e6)
        style.equal_decades(ax, own_figure=True)
        ax.get_figure().draw_without_rendering()
        box = ax.get_window_extent()
    assert box.width / 8 == pytest.approx(box.height / 7, rel=1e-6)


def test_legend_reads_by_rows():
    """Derived: matplotlib fills columns first; five names in three columns read 1 2 3 / 4 5."""
    assert style.by_rows([1, 2, 3, 4, 5], 3) == [1, 4, 2, 5, 3]
    assert style.by_rows([1, 2, 3, 4], 2) == [1, 3, 2, 4]


def test_global_settings_stay_as_they_are(made_up):
    """House rule: the style is a context, never a setting; a user's own settings change nothing."""
    from mwdlink.figures import figures_for

    before = dict(matplotlib.rcParams)
    first = figures_for(made_up.rest())["rest"].svg()
    assert dict(matplotlib.rcParams) == before
    with matplotlib.rc_context({"font.size": 30, "lines.linewidth": 9, "axes.grid": True}):
        assert figures_for(made_up.rest())["rest"].svg() == first


def test_no_pyplot_and_no_display():
    """House rule: importing and drawing leaves pyplot alone."""
    code = (
        "import sys, mwdlink.figures as f; from mwdlink.figures import style\n"
        "ax = style.new_axes(); ax.plot([1, 2]); style.save_png(ax.get_figure(), dpi=50)\n"
        "sys.exit('matplotlib.pyplot' in sys.modules)"
    )
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_files_are_the_same_bytes_every_time(made_up, tmp_path):
    """House rule: same input, same bytes, also in another process with another hash seed."""
    from mwdlink.figures import figures_for

    here = figures_for(made_up.invert())["distribution"].svg()
    assert figures_for(made_up.invert())["distribution"].svg() == here
    code = (
        "import sys, hashlib, importlib.util as u\n"
        f"s = u.spec_from_file_location('m', {made_up.__file__!r})\n"
        "m = u.module_from_spec(s); s.loader.exec_module(m)\n"
        "from mwdlink.figures import figures_for\n"
        "p = figures_for(m.invert())['distribution']\n"
        "sys.stdout.buffer.write(p.svg())"
    )
    done = subprocess.run(
        [sys.executable, "-c", code],
        check=True,
        capture_output=True,
        env={"PYTHONHASHSEED": "77", "PATH": "", "PYTHONPATH": ":".join(p for p in sys.path if p)},
    )
    assert done.stdout == here
    assert b"<dc:date>" not in here


def test_png_is_300_dots_an_inch(made_up):
    """Published format (PNG, pHYs chunk): dots a metre; 300 an inch are 11811."""
    from mwdlink.figures import figures_for

    picture = figures_for(made_up.calibrate())["law"]
    png = picture.png()
    at = png.index(b"pHYs")
    assert struct.unpack(">II", png[at + 4 : at + 12]) == (11811, 11811)
    assert png == figures_for(made_up.calibrate())["law"].png()
    assert b"Measured against fitted" in png
