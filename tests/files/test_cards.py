"""Reading polymer cards from a name or a path, and writing them."""

from __future__ import annotations

import tomllib

import pytest

from mwdlink.chains.polymer import builtin, builtin_names, template_text
from mwdlink.errors import InputError
from mwdlink.files.cards import card_text, read_polymer

CARD = """\
name = "mine"

[network]
plateau_modulus_Pa = 1.0e6
status = "measured"
source = "own"

[viscosity]
coefficient = 1e-14
exponent = 3.5
temperature_C = 150
status = "measured"
source = "own"

[density]
kg_per_m3 = 800
status = "measured"
source = "own"
"""


@pytest.fixture
def path(tmp_path):
    target = tmp_path / "mine.toml"
    target.write_text(CARD, encoding="utf-8")
    return target


def test_name_path_and_polymer(path, tmp_path, monkeypatch):
    assert read_polymer("hdpe") is builtin("hdpe")
    assert read_polymer(path).name == "mine"
    assert read_polymer(str(path)).origin == str(path)
    assert read_polymer(builtin("hdpe")) is builtin("hdpe")
    bare = tmp_path / "mycard"
    bare.write_text(CARD, encoding="utf-8")
    (tmp_path / "hdpe").write_text(CARD, encoding="utf-8")
    monkeypatch.chdir(tmp_path)
    assert read_polymer("mycard").name == "mine"
    assert read_polymer("hdpe").name == "hdpe"
    assert read_polymer("./hdpe").name == "mine"


def test_encodings(tmp_path):
    """A byte-order mark, UTF-16 and Windows line ends are what editors write (common practice)."""
    for name, data in {
        "bom": CARD.encode("utf-8-sig"),
        "wide": CARD.encode("utf-16"),
        "windows": CARD.replace("\n", "\r\n").encode(),
        "latin": CARD.replace('"own"', '"Müller"').encode("latin-1"),
    }.items():
        target = tmp_path / f"{name}.toml"
        target.write_bytes(data)
        assert read_polymer(target).melt().plateau_modulus == 1e6


@pytest.mark.parametrize(
    "old, new, row, words",
    [
        ("1.0e6", "1,0e6", 4, "decimal point"),
        ('"measured"', "measured", 5, "double quotes"),
        ('"measured"', '"measured', 5, "Close the double quotes"),
        ("exponent = 3.5", "exponent 3.5", 10, "Lines read"),
        ("exponent = 3.5", "exponent = 3.5\nexponent = 3.6", 11, "twice"),
        ("exponent = 3.5", "exponant = 3.5", 10, "Did you mean 'exponent'"),
        ("exponent = 3.5", 'exponent = "3.5"', 10, "without quotes"),
        ("exponent = 3.5\n", "", 8, "exponent is missing"),
        ("kg_per_m3 = 800", "kg_per_m3 = 0.8", 16, "g/cm3"),
        ("[density]", "[densty]", 15, "Did you mean 'density'"),
        ("= 1.0e6", "= 1.0e6\nmolar_mass_g_per_mol = 1", 5, "kg/mol"),
    ],
)
def test_what_is_wrong_is_shown_with_its_line(path, old, new, row, words):
    path.write_text(CARD.replace(old, new, 1), encoding="utf-8")
    with pytest.raises(InputError, match=words) as caught:
        read_polymer(path)
    assert caught.value.path == str(path)
    assert caught.value.row == row


def test_paths_that_lead_nowhere(path, tmp_path):
    with pytest.raises(InputError, match="no such file.*Did you mean '.*mine.toml'"):
        read_polymer(tmp_path / "mina.toml")
    with pytest.raises(InputError, match="no such file"):
        read_polymer("no/such/card.toml")
    with pytest.raises(InputError, match="folder"):
        read_polymer(tmp_path)
    with pytest.raises(InputError, match="no built-in polymer"):
        read_polymer("nylon")
    with pytest.raises(InputError):
        read_polymer("a\0b.toml")
    empty = tmp_path / "empty.toml"
    empty.write_bytes(b"")
    with pytest.raises(InputError, match="empty"):
        read_polymer(empty)


def test_unfilled_template_names_what_is_missing(tmp_path):
    target = tmp_path / "template.toml"
    target.write_text(template_text(), encoding="utf-8")
    with pytest.raises(InputError, match="not filled in yet") as caught:
        read_polymer(target)
    assert caught.value.row is not None


@pytest.mark.parametrize("name", builtin_names())
def test_a_written_card_reads_back(name, tmp_path):
    """card_text against Python's own TOML reader, and through read_polymer to the same melt."""
    mapping = builtin(name).to_dict()
    text = card_text(mapping)
    assert tomllib.loads(text) == mapping
    target = tmp_path / "card.toml"
    target.write_text(text, encoding="utf-8")
    assert read_polymer(target).melt() == builtin(name).melt()


def test_awkward_text_survives():
    mapping = {"name": 'q"\\\n\t\x7f\u00e9', "network": {"a": None, "b": [1.5, 2e-300], "c": True}}
    back = tomllib.loads(card_text(mapping))
    assert back == {"name": mapping["name"], "network": {"b": [1.5, 2e-300], "c": True}}
