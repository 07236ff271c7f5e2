"""Every picture: there, named, in words, nothing cut, nothing on top of something else."""

from __future__ import annotations

import re

import numpy as np
import pandas as pd
import pytest
from matplotlib.text import Text

from mwdlink.errors import ModelError
from mwdlink.figures import figures_for, pictures_of, plot_result, style

WANTED = {
    "predict": {"distribution", "moduli", "flow", "spectrum", "relaxation", "budget"},
    "invert": {"distribution", "moduli", "residuals", "kernels", "budget", "smoothing"},
    "spectrum": {"spectrum", "moduli", "residuals"},
    "master": {"master", "shifts", "phase-angle"},
    "rest": {"rest"},
    "blend": {"fractions", "distribution", "moduli", "flow", "spectrum", "relaxation"},
    "blendcheck": {"recovered", "residuals", "rules"},
    "tail": {"distribution", "moduli", "residuals", "explanations", "budget", "kernels"},
    "datasheet": {"claims"},
    "calibrate": {"law", "samples"},
    "batch": {"trend-mw"},
    "consistency": {"moduli", "residuals"},
    "drift": {"drift"},
}


@pytest.fixture(scope="module")
def drawn(made_up):
    return {name: figures_for(made_up.ALL[name]()) for name in made_up.ALL}


@pytest.mark.parametrize("command", WANTED)
def test_pictures_are_there_and_in_words(drawn, command):
    """The documented tables and keys give the documented pictures, each with words and numbers."""
    pictures = drawn[command]
    assert WANTED[command] <= set(pictures)
    for name, p in pictures.items():
        assert p.name == name and re.fullmatch(r"[a-z0-9-]+", name)
        assert p.title and p.description and re.search(r"\d", p.description)
        for word in ("nan", "None", "$", "\\", "_"):
            assert word not in p.description + p.title, (name, word)
        assert len(p.data) and p.csv().startswith(str(p.data.columns[0]).encode())


@pytest.mark.parametrize("command", WANTED)
def test_axes_say_quantity_and_unit(drawn, command):
    """Common practice: every axis with numbers has a label; a tick everywhere on log axes."""
    for p in drawn[command].values():
        for ax in p.figure.axes:
            assert ax.get_ylabel() or all(t.get_text() for t in ax.get_yticklabels())
            assert ax.get_xlabel() or any(a.get_xlabel() for a in p.figure.axes)


def shown_texts(figure) -> list[tuple[str, object]]:
    """All texts that can be seen, with their boxes in pixels."""
    with style.context():
        figure.draw_without_rendering()
        hidden = set()
        for ax in figure.axes:
            for axis in (ax.xaxis, ax.yaxis):
                to_screen = axis.get_transform().transform
                low, high = sorted(to_screen(axis.get_view_interval()))
                slack = 1e-6 * (high - low)
                for tick in (*axis.majorTicks, *axis.minorTicks):
                    # ticks beyond the limits exist but are not drawn
                    if not low - slack <= to_screen([tick.get_loc()])[0] <= high + slack:
                        hidden |= {tick.label1, tick.label2}
        texts = [t for t in figure.findobj(Text) if t.get_visible() and t not in hidden]
        return [(t.get_text(), t.get_window_extent()) for t in texts if t.get_text().strip()]


@pytest.mark.parametrize("command", WANTED)
def test_no_text_is_cut_or_covered(drawn, command):
    """Derived from the boxes of all texts: inside the figure, and none over another."""
    for name, p in drawn[command].items():
        if command in {"blend", "consistency", "tail"} and name in WANTED["predict"] | {
            "residuals"
        }:
            if (command, name) != ("tail", "distribution"):
                # the same picture as of predict and invert
                continue
        texts = shown_texts(p.figure)
        whole = p.figure.bbox
        for words, box in texts:
            assert box.x0 >= whole.x0 - 1 and box.x1 <= whole.x1 + 1, (name, words)
            assert box.y0 >= whole.y0 - 1 and box.y1 <= whole.y1 + 1, (name, words)
        for i, (a, box_a) in enumerate(texts):
            for b, box_b in texts[i + 1 :]:
                across = min(box_a.x1, box_b.x1) - max(box_a.x0, box_b.x0)
                up = min(box_a.y1, box_b.y1) - max(box_a.y0, box_b.y0)
                assert across < 1.5 or up < 1.5, (name, a, b)


def test_window_and_blind_ranges_are_named(drawn):
    """Stated rule: what cannot be seen is shaded and named in words on the picture."""
    words = " ".join(
        w.replace("\n", " ") for w, _ in shown_texts(drawn["invert"]["distribution"].figure)
    )
    assert "window: seen by the sweep" in words
    assert "chains too short" in words and "chains too long" in words
    words = " ".join(
        w.replace("\n", " ") for w, _ in shown_texts(drawn["spectrum"]["spectrum"].figure)
    )
    assert "supported by the data" in words and words.count("not supported") == 2
    words = " ".join(
        w.replace("\n", " ") for w, _ in shown_texts(drawn["tail"]["distribution"].figure)
    )
    assert "blind for the GPC" in words and "sweep sees weight, not M" in words
    assert "3.1 % beyond" in words


def test_bounds_are_marked_as_bounds(drawn):
    """Stated rule: an average that is only a bound says so where it is marked."""
    words = [w for w, _ in shown_texts(drawn["invert"]["distribution"].figure)]
    assert {"≤ Mn", "Mw", "≥ Mz"} <= set(words)
    assert "at most" in drawn["invert"]["distribution"].description


def test_data_open_model_line_band_filled(drawn):
    """Stated rule of the pictures, read off the artists."""
    ax = drawn["invert"]["moduli"].figure.axes[0]
    lines = {line.get_label(): line for line in ax.get_lines()}
    for name in ("G′ measured", "G″ measured"):
        assert lines[name].get_linestyle() == "None"
        assert lines[name].get_markerfacecolor() == "none"
    for name in ("G′ model", "G″ model"):
        assert lines[name].get_marker() == "None"
    assert lines["G′ model"].get_linestyle() != lines["G″ model"].get_linestyle()
    assert drawn["predict"]["moduli"].figure.axes[0].collections


@pytest.mark.parametrize(
    ("command", "name"),
    [
        ("predict", "moduli"),
        ("invert", "moduli"),
        ("master", "master"),
        ("predict", "relaxation"),
        ("predict", "flow"),
    ],
)
def test_moduli_have_equal_decades(drawn, command, name):
    """Stated rule: a decade has one length on log-log pictures of moduli."""
    figure = drawn[command][name].figure
    with style.context():
        figure.draw_without_rendering()
    ax = figure.axes[0]
    box = ax.get_window_extent()
    across = box.width / np.log10(ax.get_xlim()[1] / ax.get_xlim()[0])
    up = box.height / np.log10(ax.get_ylim()[1] / ax.get_ylim()[0])
    assert across == pytest.approx(up, rel=1e-6)
    # and the picture is not a small island in a large figure
    assert box.width > 0.7 * figure.bbox.width


@pytest.mark.parametrize("command", WANTED)
def test_drawing_on_given_axes_changes_nothing_else(made_up, command):
    """House rule: takes axes, returns them, computes nothing: tables and figure size stay."""
    result = made_up.ALL[command]()
    before = {k: t.copy(deep=True) for k, t in result.tables().items()}
    with style.context():
        own = style.new_axes(height=90)
    size = tuple(own.get_figure().get_size_inches())
    assert plot_result(result, own) is own
    assert tuple(own.get_figure().get_size_inches()) == size
    for k, table in result.tables().items():
        pd.testing.assert_frame_equal(table, before[k])
    assert plot_result(result).get_figure() is not own.get_figure()


@pytest.mark.parametrize("command", WANTED)
def test_without_intervals(made_up, command):
    """`--members 0` writes no low and high columns and no intervals: still all curves."""
    result = made_up.ALL[command]()
    tables = {
        k: t[
            [c for c in t.columns if " low" not in c and " high" not in c or c.startswith("omega")]
        ]
        for k, t in result.tables().items()
    }

    def bare(x):
        if isinstance(x, dict):
            if "value" in x and "low" in x:
                return {**x, "low": None, "high": None, "budget": {}}
            return {k: bare(v) for k, v in x.items()}
        return [bare(v) for v in x] if isinstance(x, list) else x

    pictures = pictures_of(command, bare(result.to_dict()), tables)
    assert set(pictures) >= WANTED[command] - {"budget"}


@pytest.mark.parametrize("command", [*WANTED, "unheard-of"])
def test_what_is_absent_is_left_out(made_up, command):
    """Null keys and missing tables give fewer pictures, never an error."""
    assert pictures_of(command, {}, {}) == {}
    if command in made_up.ALL:
        result = made_up.ALL[command]()
        assert set(pictures_of(command, result.to_dict(), {})) <= {
            "budget",
            "kernels",
            "recovered",
            "rules",
            "claims",
            "explanations",
        }
        assert isinstance(
            pictures_of(command, dict.fromkeys(result.to_dict()), result.tables()), dict
        )


def test_a_result_without_a_picture_says_so(made_up):
    """Derived: a plain error of the project's own tree, naming the table that is missing."""
    with pytest.raises(ModelError, match="sweep.csv"):
        plot_result(made_up.MadeUp("predict", {}, {}))
    with pytest.raises(ModelError, match="column"):
        plot_result(made_up.MadeUp("rest", {}, {"rest.csv": pd.DataFrame({"x": [1.0]})}))


def test_spreadsheet_does_not_run_a_name(made_up):
    """Stated rule: a cell that begins like a formula is written as text."""
    result = made_up.batch()
    table = result.tables()["summary.csv"]
    table.loc[3, "lot"] = "=1+1"
    text = pictures_of("batch", result.to_dict(), {"summary.csv": table})["trend-mw"].csv().decode()
    assert "\n=1+1" not in text and "'=1+1" in text


def test_hostile_values_are_survived(made_up):
    """Derived: zeros, negatives and NaN in a table leave gaps on a log axis."""
    result = made_up.predict()
    tables = result.tables()
    sweep = tables["sweep.csv"].copy()
    sweep.loc[3:5, "G' [Pa]"] = [np.nan, 0.0, -1.0]
    tables["sweep.csv"] = sweep
    pictures = pictures_of("predict", result.to_dict(), tables)
    assert b"NaN" not in pictures["moduli"].svg() and b"nan" not in pictures["moduli"].svg()


def test_target_line_and_its_fraction_are_on_the_picture(drawn):
    """Derived from the made-up target: line, marker and words."""
    words = [w for w, _ in shown_texts(drawn["blend"]["fractions"].figure)]
    assert "52 %" in words and any(w.startswith("target") for w in words)
    assert drawn["blend"]["fractions"].title.startswith("Viscosity at 0.1 rad/s")


def test_every_target_has_its_picture(made_up):
    """Derived: of several targets each property is drawn, in their order, with its own line."""
    result = made_up.blend()
    record = result.to_dict()
    other = {"quantity": "MFR_g_per_10min@2.16", "wanted": None, "range": {"low": 1.0, "high": 5.0}}
    record["targets"] = [record["target"] | {"windows": []}, other | {"fractions": []}]
    pictures = pictures_of("blend", record, result.tables())
    titles = [p.title for n, p in pictures.items() if n.startswith("fractions")]
    assert titles[0].startswith("Viscosity at 0.1 rad/s") and titles[1].startswith("Melt flow rate")
    second = [p for n, p in pictures.items() if n.startswith("fractions")][1]
    assert any(w.startswith("target 1 to 5") for w, _ in shown_texts(second.figure))
    assert "target 1 to 5" in second.description


def test_outlying_lot_is_named(drawn):
    """Derived: the made-up lot outside its limits stands on the picture and in the words."""
    assert "lot 018" in [w for w, _ in shown_texts(drawn["batch"]["trend-mw"].figure)]
    assert "lot 018" in drawn["batch"]["trend-mw"].description


def test_measured_temperatures_are_labelled_to_a_tenth():
    """As instruments show them; closer steps keep their digits (derived)."""
    from mwdlink.figures.master import by_temperature

    table = pd.DataFrame({"T [C]": [160.0113, 160.0113, 189.985]})
    assert list(by_temperature(table)) == ["160 °C", "190 °C"]
    close = pd.DataFrame({"T [C]": [190.01, 190.02]})
    assert list(by_temperature(close)) == ["190.01 °C", "190.02 °C"]
