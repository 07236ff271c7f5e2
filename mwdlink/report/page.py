"""The page of a result: one self-contained HTML text, the same for the same input."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from functools import cache
from html import escape
from importlib.resources import files
from typing import TYPE_CHECKING, Any

from mwdlink.figures.words import number
from mwdlink.report import blend_live
from mwdlink.report.inline import inline_svg
from mwdlink.report.keys import Block, blocks, card_block, said

if TYPE_CHECKING:
    from pandas import DataFrame

    from mwdlink.figures.picture import Picture

KINDS = {
    "predict": "Prediction from a distribution",
    "invert": "Distribution read from rheology",
    "spectrum": "Relaxation spectrum",
    "master": "Master curve",
    "rest": "Rest before a test",
    "blend": "Prediction of a blend",
    "blendcheck": "Mixing rule held against weighed blends",
    "tail": "High-molar-mass tail",
    "datasheet": "Check of a data sheet",
    "calibrate": "Calibration of a polymer card",
    "batch": "Batch",
}
HEAD_LABELS = ("sample", "lot", "operator", "date")
MOST_ROWS = 24
"""Rows of a table behind a figure: more are thinned evenly, all stand in the CSV."""


def render(
    result: Any,
    record: Mapping[str, Any],
    pictures: Mapping[str, Picture],
    *,
    command_line: str | None = None,
) -> str:
    """The report.

    Parameters
    ----------
    result : Result
        Gives the sentences: `answer()`, `paragraph()`, `cannot_say()`; a blend's `live_data()`.
    record : mapping
        Content of result.json.
    pictures : mapping of str to Picture
        In the order to be shown.
    command_line : str, optional
        As typed, to be quoted.

    Returns
    -------
    str
        HTML without any outside reference.
    """
    labels = {str(k): str(v) for k, v in (record.get("labels") or {}).items()}
    kind = KINDS.get(str(record.get("command")), str(record.get("command")))
    sample = labels.get("sample") or labels.get("lot")
    heading = f"{kind}: {sample}" if sample else kind
    live = None
    if callable(getattr(result, "live_data", None)):
        offered = result.live_data()
        live = None if offered is None else blend_live.check(offered)
    body = [
        _head(kind, heading, labels),
        '<main id="answer" tabindex="-1">',
        _section(
            "Answer",
            f'<p class="answer">{escape(result.answer())}</p>{_verdict(record, result.answer())}',
            "s-answer",
        ),
        _section("To copy", f'<p class="copy">{escape(result.paragraph())}</p>', "s-copy"),
        _list_section("What the data cannot say", result.cannot_say(), "s-cannot"),
        "" if live is None else blend_live.section(live),
        _figures(pictures),
        _list_section("What could explain it", _texts(record.get("explanations")), "s-explain"),
        _list_section("What would help", _texts(record.get("advice")), "s-advice"),
        _numbers(record),
        _how(record, command_line),
        _card(record),
        _cautions(record),
        "</main>",
        f"<footer><p>Made by mwdlink {escape(str(record.get('version', '')))}. "
        "This page loads nothing and sends nothing.</p></footer>",
        ""
        if live is None
        else f"{blend_live.data_block(live)}<script>{blend_live.script()}</script>",
    ]
    return document(heading, "\n".join(part for part in body if part), with_script=live is not None)


def document(title: str, body: str, *, with_script: bool = False) -> str:
    """A whole HTML document in this project's look.

    Parameters
    ----------
    title : str
        Plain text.
    body : str
        HTML, already escaped.
    with_script : bool
        Allow the live page's script, by its hash and no other.
    """
    policy = (
        "default-src 'none'; style-src 'unsafe-inline'; img-src data:; base-uri 'none'; "
        "form-action 'none'"
    )
    if with_script:
        policy += f"; script-src {blend_live.script_hash()}"
    return (
        '<!doctype html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        f'<meta http-equiv="Content-Security-Policy" content="{policy}">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        '<meta name="color-scheme" content="light dark">\n<link rel="icon" href="data:,">\n'
        f"<title>{escape(title)}</title>\n<style>{_css()}</style>\n</head>\n<body>\n"
        f'<div class="page">\n<a class="skip" href="#answer">Skip to the answer</a>\n{body}\n'
        "</div>\n</body>\n</html>\n"
    )


@cache
def _css() -> str:
    return files("mwdlink.report").joinpath("page.css").read_text(encoding="utf-8")


def _section(title: str, content: str, name: str, classes: str = "") -> str:
    of_class = f' class="{classes}"' if classes else ""
    return (
        f'<section{of_class} aria-labelledby="{name}"><h2 id="{name}">{escape(title)}</h2>'
        f"{content}</section>"
    )


def _list_section(title: str, items: Sequence[Any], name: str) -> str:
    texts = [str(i) for i in items if str(i).strip()]
    if not texts:
        return ""
    return _section(title, "<ul>" + "".join(f"<li>{escape(t)}</li>" for t in texts) + "</ul>", name)


def _head(kind: str, heading: str, labels: Mapping[str, str]) -> str:
    order = [k for k in HEAD_LABELS if k in labels] + [k for k in labels if k not in HEAD_LABELS]
    entries = "".join(
        f"<div><dt>{escape(k.replace('_', ' '))}</dt><dd>{escape(labels[k])}</dd></div>"
        for k in order
    )
    said_labels = f'<dl class="labels">{entries}</dl>' if entries else ""
    above = f'<p class="kind">{escape(kind)}</p>' if heading != kind else ""
    return f"<header>{above}<h1>{escape(heading)}</h1>{said_labels}</header>"


def _verdict(record: Mapping[str, Any], answer: str) -> str:
    """The verdict below the answer, unless the answer has said it."""
    verdict = record.get("verdict")
    if not isinstance(verdict, str) or not verdict or verdict.strip(" .") in answer:
        return ""
    return f"<p>{escape(verdict)}</p>"


def _texts(x: Any) -> list[str]:
    """The entries of a list that are sentences; other entries are shown as a table."""
    return [e for e in x if isinstance(e, str)] if isinstance(x, (list, tuple)) else []


def _figures(pictures: Mapping[str, Picture]) -> str:
    if not pictures:
        return ""
    shown = "".join(_figure(p, f"fig{i}") for i, p in enumerate(pictures.values(), start=1))
    return _section("Figures", f'<div class="figures">{shown}</div>', "s-figures")


def _figure(picture: Picture, prefix: str) -> str:
    svg = inline_svg(
        picture.svg(), prefix=prefix, title=picture.title, description=picture.description
    )
    return (
        f'<figure id="{prefix}"><div class="whole">{svg}'
        f"<figcaption><strong>{escape(picture.title)}.</strong> "
        f"{escape(picture.description)}</figcaption></div>"
        "<details><summary>Table behind this figure</summary>"
        f"{_frame(picture.data, picture)}</details></figure>"
    )


def _frame(data: DataFrame, picture: Picture) -> str:
    step = max(1, math.ceil(len(data) / MOST_ROWS))
    thin = data.iloc[::step]
    numeric = [data.iloc[:, c].dtype.kind in "fiu" for c in range(data.shape[1])]
    head = "".join(
        f'<th scope="col"{_n(n)}>{escape(str(c))}</th>'
        for c, n in zip(data.columns, numeric, strict=True)
    )
    rows = []
    for row in thin.itertuples(index=False, name=None):
        cells = (f"<td{_n(n)}>{escape(_cell(v))}</td>" for v, n in zip(row, numeric, strict=True))
        rows.append(f"<tr>{''.join(cells)}</tr>")
    part = f"Every {_nth(step)} of {len(data)} rows; all" if step > 1 else "The same numbers"
    return (
        f"{_scroll(f'Table behind the figure {picture.title}')}"
        f"<table><thead><tr>{head}</tr></thead>"
        f"<tbody>{''.join(rows)}</tbody></table></div>"
        f'<p class="small">{part} in figures/{escape(picture.name)}.csv.</p>'
    )


def _nth(n: int) -> str:
    ending = "th" if n % 100 in (11, 12, 13) else {1: "st", 2: "nd", 3: "rd"}.get(n % 10, "th")
    return f"{n}{ending}"


def _cell(v: Any) -> str:
    if v is None or v != v:
        return "–"
    if isinstance(v, float):
        return number(v, 4)
    return said(v)


def _n(numeric: bool) -> str:
    return ' class="n"' if numeric else ""


def _scroll(label: str) -> str:
    return f'<div class="scroll" tabindex="0" role="region" aria-label="{escape(label)}">'


def table(block: Block) -> str:
    """A block as a table in a region that scrolls by itself."""
    head = "".join(f'<th scope="col">{escape(h)}</th>' for h in block.head)
    rows = "".join(
        f'<tr><th scope="row">{escape(r[0])}</th>'
        f"{''.join(f'<td>{escape(c)}</td>' for c in r[1:])}</tr>"
        for r in block.rows
    )
    return (
        f"{_scroll(block.caption)}<table><caption>{escape(block.caption)}</caption>"
        f"<thead><tr>{head}</tr></thead><tbody>{rows}</tbody></table></div>"
    )


def _numbers(record: Mapping[str, Any]) -> str:
    tables = "".join(table(b) for b in blocks(record))
    return _section("Numbers", tables, "s-numbers") if tables else ""


def _how(record: Mapping[str, Any], command_line: str | None) -> str:
    model = record.get("model") or {}
    fit = record.get("fit")
    fit = fit if isinstance(fit, Mapping) else {}
    entries: list[tuple[str, str]] = []

    def put(name: str, x: Any, code: bool = False) -> None:
        if x is None or x == "" or x == []:
            return
        text = escape(x if isinstance(x, str) else said(x))
        entries.append((name, f"<code>{text}</code>" if code else text))

    put("Command", command_line, code=True)
    put(
        "Polymer card",
        (record.get("polymer") or {}).get("title") or (record.get("polymer") or {}).get("name"),
    )
    kernels = model.get("kernels")
    put("Kernels", ", ".join(map(str, kernels)) if isinstance(kernels, (list, tuple)) else kernels)
    exponent = model.get("exponent")
    if isinstance(exponent, (list, tuple)) and len(exponent) == 2:
        put("Mixing exponent", f"{said(exponent[0])} to {said(exponent[1])}")
    else:
        put("Mixing exponent", exponent)
    put("Rouse part", model.get("rouse"))
    put("Central model", record.get("central_model"))
    put("Method", fit.get("method"))
    put("Smoothing λ", fit.get("smoothing"))
    put("Noise, relative", record.get("noise", fit.get("noise")))
    if isinstance(record.get("settings"), Mapping):
        put(
            "Settings",
            "; ".join(
                f"{str(k).replace('_', ' ')} {said(v)}" for k, v in record["settings"].items()
            ),
        )
    put("Seed", record.get("seed"))
    put("Version", f"mwdlink {record.get('version', '')}")
    if isinstance(record.get("versions"), Mapping):
        put("With", ", ".join(f"{k} {v}" for k, v in record["versions"].items()))
    if record.get("omitted"):
        put("Left out", record["omitted"])
    rows = "".join(f"<dt>{escape(n)}</dt><dd>{x}</dd>" for n, x in entries)
    content = f'<dl class="how">{rows}</dl>'
    inputs = record.get("inputs") or []
    if inputs:
        lines = "".join(
            f'<tr><th scope="row"><code>{escape(str(i.get("path")))}</code></th>'
            f"<td><code>{escape(str(i.get('sha256')))}</code></td></tr>"
            for i in inputs
        )
        content += (
            f"{_scroll('Input files')}<table><caption>Input files</caption>"
            '<thead><tr><th scope="col">File</th>'
            f'<th scope="col">SHA-256</th></tr></thead><tbody>{lines}</tbody></table></div>'
        )
    return _section("How it was done", content, "s-how")


def _card(record: Mapping[str, Any]) -> str:
    polymer = record.get("polymer")
    block = card_block(polymer) if isinstance(polymer, Mapping) else None
    if block is None or not isinstance(polymer, Mapping):
        return ""
    note = f"<p>{escape(str(polymer['note']))}</p>" if polymer.get("note") else ""
    return _section("Where the material's numbers come from", note + table(block), "s-card")


def _cautions(record: Mapping[str, Any]) -> str:
    texts = list(dict.fromkeys(str(w.get("text", "")) for w in record.get("warnings") or []))
    texts = [t for t in texts if t]
    if not texts:
        return ""
    items = "".join(f"<li>{escape(t)}</li>" for t in texts)
    return _section("Cautions", f"<ul>{items}</ul>", "s-cautions", "cautions")


def index_page(title: str, intro: Sequence[str], entries: Sequence[tuple[str, str, str]]) -> str:
    """A page that links reports.

    Parameters
    ----------
    title : str
    intro : sequence of str
        Paragraphs.
    entries : sequence of (href, title, sentence)
        Relative addresses of the reports with what each says.
    """
    paragraphs = "".join(f"<p>{escape(p)}</p>" for p in intro)
    rows = "".join(
        f'<li><a href="{escape(href)}">{escape(name)}</a><br>{escape(sentence)}</li>'
        for href, name, sentence in entries
    )
    body = (
        f'<header><h1>{escape(title)}</h1></header><main id="answer" tabindex="-1">'
        f"<section>{paragraphs}<ol>{rows}</ol></section></main>"
    )
    return document(title, body)
