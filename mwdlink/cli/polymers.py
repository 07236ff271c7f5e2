"""``mwdlink polymers``: the built-in cards, and where each of their numbers is from."""

from __future__ import annotations

from typing import Any

import click

from mwdlink.cli.deliver import columns
from mwdlink.cli.options import PolymerName
from mwdlink.cli.summary import number, wrapped


@click.command()
@click.argument("name", type=PolymerName(), required=False)
@click.option("--template", is_flag=True, help="An empty card with every key explained.")
@click.option("--toml", "as_toml", is_flag=True, help="The card as TOML, to start your own from.")
@click.option("--json", "as_json", is_flag=True, help="The card as JSON.")
def command(name: str | None, template: bool, as_toml: bool, as_json: bool) -> None:
    """The built-in cards, or one card with the status and source of each number.

    \b
    mwdlink polymers
    mwdlink polymers hdpe
    mwdlink polymers --template > card.toml

    NAME is a built-in card or the path of your own. Statuses: published (read in
    the source), secondary (quoted by another publication), fitted, measured,
    recalled (from memory), computed, assumed.
    """
    from mwdlink.chains.polymer import builtin, builtin_names, template_text
    from mwdlink.files.cards import card_text, read_polymer
    from mwdlink.files.results import json_text

    if template:
        click.echo(template_text(), nl=False)
        return
    if name is None:
        cards = [builtin(n) for n in builtin_names()]
        if as_json:
            click.echo(json_text({c.name: c.to_dict() for c in cards}), nl=False)
            return
        first = max(len(c.name) for c in cards)
        for card in cards:
            line = wrapped(
                f"{card.title}, {card.temperature_C:g} C",
                columns(),
                " " * (first + 2),
                "x" * (first + 2),
            )
            click.echo("\n".join([f"{card.name:<{first + 2}}{line[0][first + 2 :]}", *line[1:]]))
        return
    card = read_polymer(name)
    if as_json:
        click.echo(json_text(card.to_dict()), nl=False)
    elif as_toml:
        click.echo(card_text(card.to_dict()), nl=False)
    else:
        click.echo("\n".join(described(card, columns())))


def described(card: Any, width: int) -> list[str]:
    """A card in lines of at most `width` columns."""
    lines = wrapped(f"{card.name}: {card.title}", width)
    if card.note:
        lines += wrapped(card.note, width)
    section = source = ""
    for row in card.constants_table():
        head, _, key = row["key"].rpartition(".")
        if head != section:
            lines += ["", head]
            section, source = head, ""
        value = row["value"]
        if isinstance(value, (list, tuple)):
            text = " to ".join(number(v) for v in value)
        else:
            text = value if isinstance(value, str) else number(value)
        unit = "" if row["unit"] == "-" else f" {row['unit']}"
        status = f" ({row['status']})" if row["status"] else ""
        lines += wrapped(f"{_plain(key)}: {text}{unit}{status}", width, "    ", "  ")
        if row["source"] and row["source"] != source:
            lines += wrapped(row["source"], width, "      ", "      ")
            source = row["source"]
    for caution in card.warnings:
        lines += ["", *wrapped(f"note: {caution.text}", width)]
    return lines


def _plain(key: str) -> str:
    """A card's key in words: its unit stands behind the number."""
    for ending in (
        "kg_per_m3",
        "_g_per_mol",
        "_kJ_per_mol",
        "_dL_per_g",
        "_per_K",
        "_Pa",
        "_K",
        "_C",
        "_s",
    ):
        key = key.removesuffix(ending)
    return key.replace("_", " ") or "value"
